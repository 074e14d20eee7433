"""Recover: seal what the journal of a dead stream still holds, then let the journal go. Idempotent; may be
killed.

It is the archivist's own work on a stream that will not go on, so the records come out the same byte for
byte. It refuses a journal whose recorder lives and a folder that is no journal, and it removes nothing but a
journal's own files, by name.
"""

from __future__ import annotations

import os
import shutil
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from daq.errors import RecordingError
from daq.record.archivist import LOCK_NAME as ARCHIVIST_LOCK_NAME
from daq.record.archivist import POLL_S, Archivist, Report
from daq.record.mark import MARK_NAME
from daq.record.sealing import Reduce
from daq.stream.files import OsFiles
from daq.stream.segments import (
    CHECKPOINT_NAME,
    LOCK_NAME,
    SEGMENT_HEADER_BYTES,
    SPARE_PREFIX,
    segment_numbers,
    unpack_segment_header,
)

COPY_PATIENCE_S = 60.0
SCRATCH_NAME = "rebuilding"
JOURNAL_PREFIX = "journal-"
BESIDE_SEGMENTS = (CHECKPOINT_NAME, MARK_NAME, f"{MARK_NAME}.new", ARCHIVIST_LOCK_NAME, LOCK_NAME)


def recover(
    journal_folder: Path,
    out_folder: Path,
    *,
    reduce: Reduce,
    report: Report = lambda _: None,
    pulse: Callable[[], object] = bool,
    keep: bool = False,
    afresh: bool = False,
) -> tuple[Path, ...]:
    """The records of that journal, sealed now or before. RecordingError where the disk takes none now.

    afresh: also runs that were sealed before, where their records are gone from the out folder.
    The journal is removed, unless `keep`, a damage of it or a copy that is still owed speaks against it.
    """
    records: list[Path] = []

    def note(said: Mapping[str, Any]) -> None:
        if said["report"] == "sealed":
            records.append(Path(said["path"]))
        report(said)

    check_is_journal(journal_folder)
    with _sole_owner(journal_folder):
        with Archivist(
            journal_folder,
            out_folder,
            journal_folder / SCRATCH_NAME,
            reduce,
            note,
            pulse=pulse,
            stream_is_dead=True,
            afresh=afresh,
        ) as archivist:
            _finish(archivist, pulse)
            damage, owed = archivist.damage, archivist.copies_owed
        if damage:
            report({"report": "journal_damaged", "path": str(journal_folder), "why": damage})
        elif not keep and not owed:
            remove_journal(journal_folder)
    return tuple(records)


def check_is_journal(folder: Path) -> None:
    """RecordingError for anything but a journal's folder; nothing is written there before that is known."""
    try:
        names = sorted(os.listdir(folder))
        if any(_has_header(folder / name) for name in names if segment_numbers([name])):
            return
    except OSError as error:
        raise RecordingError(f"no journal at {folder}: {error.strerror}") from error
    if not folder.name.startswith(JOURNAL_PREFIX) or not all(_is_ours(name) for name in names):
        raise RecordingError(
            f"{folder} is not a journal (it holds no segment that midspan wrote): nothing was touched;"
            " name a folder .spool/FRAME/journal-... of the data folder"
        )


def remove_journal(folder: Path) -> None:
    """Remove a journal's own files, oldest segment first; the folder too, unless somebody's file lies in it."""
    names = sorted(os.listdir(folder))
    shutil.rmtree(folder / SCRATCH_NAME, ignore_errors=True)
    segments = [name for name in names if _is_segment(name)]
    for name in (*segments, *BESIDE_SEGMENTS):
        (folder / name).unlink(missing_ok=True)
    try:
        folder.rmdir()
    except OSError:
        return  # not ours to decide what else lies there


def _has_header(segment: Path) -> bool:
    with open(segment, "rb") as file:
        return unpack_segment_header(file.read(SEGMENT_HEADER_BYTES)) is not None


def _is_ours(name: str) -> bool:
    return _is_segment(name) or name in (*BESIDE_SEGMENTS, SCRATCH_NAME)


def _is_segment(name: str) -> bool:
    spare = name.startswith(SPARE_PREFIX) and name.removeprefix(SPARE_PREFIX).isdecimal()
    return spare or bool(segment_numbers([name]))


def _finish(archivist: Archivist, pulse: Callable[[], object]) -> None:
    """Follow to the end, then give owed copies their time."""
    patience_until_s = time.monotonic() + COPY_PATIENCE_S
    while True:
        pulse()
        busy = archivist.advance(time.monotonic())
        if archivist.trouble:
            raise RecordingError(archivist.trouble)
        if busy:
            patience_until_s = time.monotonic() + COPY_PATIENCE_S
        elif not archivist.copying or time.monotonic() > patience_until_s:
            return
        else:
            time.sleep(POLL_S)


@contextmanager
def _sole_owner(journal_folder: Path) -> Iterator[None]:
    try:
        handle = OsFiles().lock(journal_folder / LOCK_NAME)
    except BlockingIOError as error:
        raise RecordingError(f"{journal_folder} is being written by a living recorder") from error
    try:
        yield
    finally:
        os.close(handle)
