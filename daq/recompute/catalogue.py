"""Catalogue: what the sealed records of a folder say, in one small SQLite file, so that a question takes no hour.

It is never trusted over the records: every update compares each record's own digest (in its first block) with the one
that was read, reads what is new or other, and forgets what is gone. It may be deleted at any time; the next update
makes it again. A file of another version, a damaged one and a foreign one are told apart: the first two are made
again, a foreign one is refused.
"""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import closing, contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from daq.errors import MidspanError, RecordDamaged
from daq.recompute.many import records_in
from daq.record.read import meta_of, open_sealed, promised_digest
from daq.record.texts import plain_text

VERSION = 1
APPLICATION_ID = 0x6D645370  # "mdSp", in the header of the file: whose it is
BUSY_S = 10.0
COMMIT_EVERY = 200

TEXTS = (
    "path",
    "digest",
    "created_utc",
    "series",
    "specimen",
    "frame",
    "fixture",
    "method",
    "standard",
    "material",
    "batch",
    "operator",
    "verdict",
    "break_class",
)
WHOLES = ("loading", "simulated", "interrupted")
NUMBERS = (
    "strength_mpa",
    "strength_u_k2_mpa",
    "modulus_gpa",
    "peak_n",
    "stress_rate_mean_mpa_s",
    "time_to_break_s",
    "strain_at_break",
)
COLUMNS = (*TEXTS, *WHOLES, *NUMBERS)


@dataclass(frozen=True, slots=True)
class Updated:
    """What an update found. damaged: a line for each record that could not be read."""

    records: int
    read: int
    gone: int
    damaged: tuple[str, ...]


def update(file: Path, folder: Path, progress: Callable[[int, int], object] = lambda *_: None) -> Updated:
    """Bring the catalogue in line with the records below the folder; made anew where it is of no use."""
    found = {str(path.absolute()): path for path in records_in([folder])}
    damaged: list[str] = []
    read = 0
    with _opened(file) as base:
        known = dict(base.execute("SELECT path, digest FROM records"))
        gone = [(path,) for path in known if path not in found]
        base.executemany("DELETE FROM records WHERE path = ?", gone)
        for number, (name, path) in enumerate(found.items(), 1):
            try:
                if known.get(name) != promised_digest(path):
                    _put(base, row_of(path))
                    read += 1
            except RecordDamaged as error:
                base.execute("DELETE FROM records WHERE path = ?", (name,))
                damaged.append(str(error))
            if number % COMMIT_EVERY == 0:
                base.commit()
            progress(number, len(found))
        base.commit()
    return Updated(len(found), read, len(gone), tuple(damaged))


def row_of(path: Path) -> dict[str, Any]:
    """What a record says of itself, as sealed."""
    with open_sealed(path) as file:
        meta = meta_of(file)
        cards = {name: json.loads(plain_text(card[()])) for name, card in file["cards"].items()}
    run, method, specimen = (_mapping(cards.get(name)) for name in ("run", "method", "specimen"))
    result = meta["result"]
    said: dict[str, Any] = {
        **{name: meta[name] for name in ("created_utc", "series", "specimen")},
        "path": str(path.absolute()),
        "digest": promised_digest(path),
        "frame": _mapping(cards.get("frame")).get("name"),
        "fixture": run.get("fixture"),
        "operator": run.get("operator"),
        "material": run.get("material") or method.get("material"),
        "method": method.get("name"),
        "standard": _standard(method),
        "batch": specimen.get("batch"),
        "verdict": result.get("verdict"),
        "break_class": result.get("break_class"),
    }
    wholes = {name: int(meta[name]) for name in WHOLES}
    numbers = {name: _number(result.get(name)) for name in NUMBERS}
    texts = {name: str(said[name] or "") for name in TEXTS}
    return {**texts, **wholes, **numbers}


def _mapping(found: object) -> Mapping[str, Any]:
    return found if isinstance(found, Mapping) else {}


def _number(found: object) -> float | None:
    return float(found) if isinstance(found, int | float) and not isinstance(found, bool) else None


def _standard(method: Mapping[str, Any]) -> str:
    return str(_mapping(method.get("source")).get("standard") or method.get("standard") or "")


# --- asking


@dataclass(frozen=True, slots=True)
class Question:
    """texts: column -> part of it, case left aside. ranges: column -> (least, most), None = open. since, until: as the
    UTC time begins. simulated: None = both."""

    texts: Mapping[str, str]
    ranges: Mapping[str, tuple[float | None, float | None]]
    since: str = ""
    until: str = ""
    simulated: bool | None = None


def ask(file: Path, question: Question) -> list[dict[str, Any]]:
    """The records that fit, by time."""
    clauses, values = [], []
    for column, part in question.texts.items():
        assert column in TEXTS
        clauses.append(f"instr(lower({column}), lower(?)) > 0")
        values.append(part)
    for column, (least, most) in question.ranges.items():
        assert column in NUMBERS
        for sign, bound in ((">=", least), ("<=", most)):
            if bound is not None:
                clauses.append(f"{column} {sign} ?")
                values.append(bound)  # type: ignore[arg-type]
    if question.since:
        clauses.append("created_utc >= ?")
        values.append(question.since)
    if question.until:  # a day, a month or a year is meant to its end
        clauses.append("substr(created_utc, 1, length(?)) <= ?")
        values += [question.until, question.until]
    if question.simulated is not None:
        clauses.append(f"simulated = {int(question.simulated)}")
    where = f" WHERE {' AND '.join(clauses)}" if clauses else ""
    with _opened(file) as base:
        rows = base.execute(
            f"SELECT {', '.join(COLUMNS)} FROM records{where} ORDER BY created_utc, path", values
        )
        return [_plain(dict(zip(COLUMNS, row, strict=True))) for row in rows]


def _plain(row: dict[str, Any]) -> dict[str, Any]:
    return {**row, "simulated": bool(row["simulated"]), "interrupted": bool(row["interrupted"])}


# --- the file


@contextmanager
def _opened(file: Path) -> Iterator[sqlite3.Connection]:
    """The catalogue, made where it is not there or not of this version."""
    try:
        file.parent.mkdir(parents=True, exist_ok=True)
        base = _made(file)
    except (sqlite3.Error, OSError) as error:
        raise MidspanError(
            f"{file} cannot be used as a catalogue ({error}); name another with --catalogue"
        ) from error
    with closing(base):
        try:
            yield base
        except sqlite3.Error as error:
            raise MidspanError(f"{file}: {error}; delete it, it is made again from the records") from error


def _made(file: Path) -> sqlite3.Connection:
    for attempt in range(2):
        base = sqlite3.connect(file, timeout=BUSY_S)
        try:
            whose, version, tables = (
                base.execute(f"PRAGMA {name}").fetchone()[0]
                for name in ("application_id", "user_version", "schema_version")
            )
            if tables and whose != APPLICATION_ID:
                base.close()
                raise MidspanError(f"{file} is another program's file: nothing was touched; name another")
            if whose == APPLICATION_ID and version == VERSION:
                base.execute("SELECT count(*) FROM records").fetchone()
                return base
            _create(base)
            return base
        except sqlite3.DatabaseError:
            base.close()
            if attempt or not _is_ours(file):
                raise
            for name in (file.name, f"{file.name}-wal", f"{file.name}-shm"):
                file.with_name(name).unlink(missing_ok=True)
    raise AssertionError


def _is_ours(file: Path) -> bool:
    """By the header, which stands where the rest may be damaged."""
    with open(file, "rb") as opened:
        head = opened.read(72)
    return head[68:72] == APPLICATION_ID.to_bytes(4, "big")


def _create(base: sqlite3.Connection) -> None:
    columns = [f"{name} TEXT NOT NULL" for name in TEXTS]
    columns[0] = "path TEXT PRIMARY KEY NOT NULL"
    columns += [f"{name} INTEGER NOT NULL" for name in WHOLES]
    columns += [f"{name} REAL" for name in NUMBERS]
    base.execute("PRAGMA journal_mode = WAL")
    base.execute(f"PRAGMA application_id = {APPLICATION_ID}")
    base.execute("DROP TABLE IF EXISTS records")
    base.execute(f"CREATE TABLE records ({', '.join(columns)}) STRICT")
    base.execute(f"PRAGMA user_version = {VERSION}")
    base.commit()


def _put(base: sqlite3.Connection, row: Mapping[str, Any]) -> None:
    marks = ", ".join("?" for _ in COLUMNS)
    base.execute(f"INSERT OR REPLACE INTO records ({', '.join(COLUMNS)}) VALUES ({marks})", _values(row))


def _values(row: Mapping[str, Any]) -> Sequence[Any]:
    return [row[name] for name in COLUMNS]
