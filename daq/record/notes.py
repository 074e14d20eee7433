"""Notes beside a sealed record: appended, chained and synced, never changed; the record itself is never touched.

<record>.notes      one JSON line a note: number, digest of the record, digest of the line before, the note, own digest
NOTES.chain         one line a note of the whole folder, each chained to the one before: a notes file that was cut
                    short or taken away is missed there

A change of any line, an order turned round, a line taken out: `read_notes` says which. A chain that somebody rewrites
from the first line on to the last, in both files, is seen only against a digest kept elsewhere; reports print it.
"""

from __future__ import annotations

import fcntl
import json
import os
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from hashlib import sha256
from pathlib import Path
from typing import Any

from daq.cards.notes import Note, read_note
from daq.errors import CardError, RecordDamaged, RecordingError
from daq.record.mark import sync_folder
from daq.record.publish import sha256_of

ENDING = ".notes"
LEDGER = "NOTES.chain"
LOCK = ".notes.lock"
FORMAT = "midspan note 1"
NOTES_MAX = 1000
FILE_BYTES_MAX = 8 << 20


@dataclass(frozen=True, slots=True)
class Kept:
    """notes: those up to the first line that is not as written. head: digest of the last good line.

    problems: one line each; empty when everything is as written.
    """

    notes: tuple[Note, ...] = ()
    head: str = ""
    problems: tuple[str, ...] = ()


def notes_path(record: Path) -> Path:
    """<stem>.notes in the record's own folder."""
    return record.with_name(record.stem + ENDING)


def read_notes(record: Path) -> Kept:
    """What was noted, and whether it still is what was written. Never raises on damage: it is told in `problems`."""
    path = notes_path(record)
    try:
        lines = _lines(path)
    except OSError as error:
        return Kept(problems=(f"{path}: cannot be read ({error.strerror})",))
    except RecordDamaged as error:
        return Kept(problems=(str(error),))
    notes: list[Note] = []
    heads: list[str] = []
    problem = ""
    previous = sha256_of(record) if lines and record.exists() else ""
    for number, line in enumerate(lines, 1):
        try:
            note, previous = _checked(line, number, record.name, previous)
        except ValueError as error:
            problem = f"{path}: line {number}: {error}; it and what follows are left out"
            break
        notes.append(note)
        heads.append(previous)
    problems = [problem] if problem else list(_ledger_problems(record, heads))
    return Kept(tuple(notes), heads[-1] if heads else "", tuple(problems))


def append_note(record: Path, note: Note) -> str:
    """Add one note; returns the digest of its line. Refuses (RecordDamaged) where what is there is not as written.

    OSError or RecordingError where the disk does not take it; then the file is as it was.
    """
    with _folder_lock(record.parent):
        kept = read_notes(record)
        if kept.problems:
            raise RecordDamaged(
                "notes are not as written, nothing was added: " + kept.problems[0],
                first_bad=notes_path(record).name,
            )
        if len(kept.notes) >= NOTES_MAX:
            raise RecordingError(f"{notes_path(record)}: {NOTES_MAX} notes are the most a record takes")
        previous = kept.head or sha256_of(record)
        number = len(kept.notes) + 1
        line, digest = _line(number, record.name, previous, note)
        old = notes_path(record).read_bytes() if kept.notes else b""
        _extend(notes_path(record), old, line)
        _add_to_ledger(record, number, digest)
    return digest


# --- lines


def _line(number: int, name: str, previous: str, note: Note) -> tuple[bytes, str]:
    said = {"format": FORMAT, "number": number, "record": name, "previous": previous, "note": note.as_json()}
    digest = _digest(said)
    return json.dumps({**said, "sha256": digest}, ensure_ascii=False, sort_keys=True).encode() + b"\n", digest


def _digest(said: Mapping[str, Any]) -> str:
    return sha256(json.dumps(said, ensure_ascii=False, sort_keys=True).encode()).hexdigest()


def _lines(path: Path) -> list[bytes]:
    """Nothing where there is no file."""
    try:
        size_bytes = path.stat().st_size
    except FileNotFoundError:
        return []
    if size_bytes > FILE_BYTES_MAX:
        raise RecordDamaged(f"{path}: {size_bytes} bytes, at most {FILE_BYTES_MAX}", first_bad="file size")
    return path.read_bytes().splitlines()


def _checked(line: bytes, number: int, name: str, previous: str) -> tuple[Note, str]:
    """The note of a line and the line's digest; ValueError says what is wrong."""
    try:
        said = json.loads(line)
        promised = said.pop("sha256")
    except (ValueError, AttributeError, KeyError, TypeError):
        raise ValueError("not a line of notes") from None
    if _digest(said) != promised:
        raise ValueError("altered after it was written")
    if (said.get("format"), said.get("number"), said.get("record")) != (FORMAT, number, name):
        raise ValueError(
            f"belongs to another place ({said.get('record')} {said.get('number')}, {said.get('format')})"
        )
    if said.get("previous") != previous:
        before = "the record" if number == 1 else "the line before it"
        raise ValueError(f"{before} is not the one it was written after")
    try:
        return read_note(said["note"]), promised
    except (CardError, KeyError, TypeError) as error:
        raise ValueError(f"not readable as a note ({error})") from error


def _extend(path: Path, old: bytes, line: bytes) -> None:
    """The old content and one line more, whole or not at all."""
    temp = path.with_name(f".{path.name}.part")
    with open(temp, "wb") as file:
        file.write(old + line)
        file.flush()
        os.fsync(file.fileno())
    os.replace(temp, path)
    sync_folder(path.parent)


# --- the folder's own chain


@contextmanager
def _folder_lock(folder: Path) -> Iterator[None]:
    """One writer of notes at a time in a folder."""
    descriptor = os.open(folder / LOCK, os.O_CREAT | os.O_RDWR, 0o644)
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX)
        yield
    finally:
        os.close(descriptor)


def _ledger_lines(folder: Path) -> list[tuple[str, str, str, int]]:
    """(chain, digest, file, number) of every line; RecordDamaged where the chain does not hold."""
    lines = _lines(folder / LEDGER)
    found, chain = [], ""
    for place, line in enumerate(lines, 1):
        words = line.decode("utf-8", "replace").split("  ")
        good = len(words) == 4 and words[3].isdecimal() and words[0] == _chained(chain, *words[1:])
        if not good:
            raise RecordDamaged(f"{folder / LEDGER}: not as written", first_bad=f"line {place}")
        chain = words[0]
        found.append((words[0], words[1], words[2], int(words[3])))
    return found


def _chained(chain: str, digest: str, name: str, number: str) -> str:
    return sha256(f"{chain} {digest} {name} {number}".encode()).hexdigest()


def _ledger_problems(record: Path, heads: list[str]) -> Iterator[str]:
    try:
        mine = [line for line in _ledger_lines(record.parent) if line[2] == record.name]
    except (OSError, RecordDamaged) as error:
        yield str(error)
        return
    listed = [digest for _, digest, _, _ in mine]
    path = notes_path(record)
    if len(listed) > len(heads):
        yield f"{path}: {len(listed)} notes were written, {len(heads)} are there"
    elif listed != heads[: len(listed)]:
        yield f"{path}: other notes than those listed in {LEDGER}"
    elif len(heads) - len(listed) > 1:  # one may be missing: a kill between the two files
        yield f"{path}: {len(heads) - len(listed)} notes are not listed in {LEDGER}"


def _add_to_ledger(record: Path, number: int, digest: str) -> None:
    """Append; first what a kill kept from being listed."""
    folder = record.parent
    lines = _ledger_lines(folder)
    chain = lines[-1][0] if lines else ""
    mine = sum(line[2] == record.name for line in lines)
    rows = [json.loads(line) for line in _lines(notes_path(record))[mine:number]]
    text = b""
    for row in rows:
        assert row["number"] != number or row["sha256"] == digest
        chain = _chained(chain, row["sha256"], record.name, str(row["number"]))
        text += f"{chain}  {row['sha256']}  {record.name}  {row['number']}\n".encode()
    old = (folder / LEDGER).read_bytes() if lines else b""
    _extend(folder / LEDGER, old, text)
