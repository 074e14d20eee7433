"""Proofs: polarity check and stop drill as recorded for one card, wiring and version. A change of any voids them.

So does a wrong sign seen by the watch: the standing proof is then set aside with the reason and the time. Nothing that
was recorded goes away: former proofs stand under "earlier", what voided them under "voids", and a file that cannot be
read is kept under another name.
"""

from __future__ import annotations

import datetime as dt
import hashlib
import json
import os
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from daq.cards.frame import FrameCard
from daq.version import VERSION

KINDS = ("polarity", "stop_drill")
CELL_LOCK = "cell_lock"
POLARITY = "polarity"


@dataclass(frozen=True, slots=True)
class Void:
    """Why a proof counts no more. locked_s: stream time of the watch's lock; None: the bench ended locked."""

    reason: str
    utc: str
    stream_id: int
    locked_s: float | None


def card_digest(frame: FrameCard) -> str:
    """SHA-256 of the resolved card."""
    return hashlib.sha256(frame.model_dump_json().encode()).hexdigest()


def read_proofs(path: Path, frame: FrameCard) -> dict[str, bool]:
    """{"polarity": bool, "stop_drill": bool, "cell": bool}; a simulated frame has all. cell: no overload waits for its
    check; a changed card is a cell that was seen to anew.
    """
    if frame.simulated:
        return dict.fromkeys((*KINDS, "cell"), True)
    stored = _stored(path) or {}
    lock = stored.get(CELL_LOCK)
    locked = isinstance(lock, dict) and lock.get("card") == card_digest(frame)
    return {**{kind: is_valid(stored.get(kind), frame) for kind in KINDS}, "cell": not locked}


def is_valid(proof: object, frame: FrameCard) -> bool:
    return (
        isinstance(proof, dict)
        and proof.get("card") == card_digest(frame)
        and proof.get("version") == VERSION
    )


def write_proof(path: Path, frame: FrameCard, kind: str, found: dict[str, Any]) -> None:
    """Add one proof; earlier ones of the same kind are kept under "earlier"."""
    assert kind in KINDS
    stored = _stored(path) or {}
    if kind in stored:
        stored.setdefault("earlier", []).append(stored[kind])
    stored[kind] = {**found, "card": card_digest(frame), "version": VERSION}
    _write(path, stored)


def void_proof(path: Path, kind: str, why: Void) -> None:
    """Set the standing proof aside. One lock voids once: heard again, it cannot touch a newer proof."""
    assert kind in KINDS
    stored = _stored(path) or {}
    voids: list[dict[str, Any]] = stored.setdefault("voids", [])
    known = any((void["stream"], void["locked_s"]) == (why.stream_id, why.locked_s) for void in voids)
    if known or (why.locked_s is None and kind not in stored):
        return
    void = {"reason": why.reason, "utc": why.utc, "stream": why.stream_id, "locked_s": why.locked_s}
    voids.append({"kind": kind, **void})
    if kind in stored:
        stored.setdefault("earlier", []).append({**stored.pop(kind), "void": void})
    _write(path, stored)


def void_polarity(path: Path, stream_id: int, locked_s: float | None) -> None:
    """The watch has locked the polarity: whoever starts next has to push on the fixture again."""
    void_proof(path, POLARITY, Void("the force had the wrong sign", _utc(), stream_id, locked_s))


def lock_cell(path: Path, frame: FrameCard, stream_id: int, locked_s: float) -> None:
    """An overload outlives the daemon. The same one locks once."""
    stored = _stored(path) or {}
    locks = stored.get("cell_locks", [])
    known = any((lock["stream"], lock["locked_s"]) == (stream_id, locked_s) for lock in locks)
    if known or stored.get(CELL_LOCK, {}).get("card") == card_digest(frame):
        return
    lock = {"reason": "overload", "utc": _utc(), "stream": stream_id, "locked_s": locked_s}
    stored[CELL_LOCK] = {**lock, "card": card_digest(frame)}
    _write(path, stored)


def free_cell(path: Path, checked: dict[str, Any]) -> None:
    """Zero and weight were right; the lock is kept with what lifted it."""
    stored = _stored(path) or {}
    if CELL_LOCK in stored:
        lock = {**stored.pop(CELL_LOCK), "checked": {**checked, "utc": _utc()}}
        stored.setdefault("cell_locks", []).append(lock)
        _write(path, stored)


def _utc() -> str:
    return dt.datetime.now(dt.UTC).isoformat(timespec="milliseconds")


def _stored(path: Path) -> dict[str, Any] | None:
    """None: there is no file, or none that can be read."""
    try:
        stored = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None
    return stored if isinstance(stored, dict) else None


def _write(path: Path, stored: dict[str, Any]) -> None:
    """On the disk when it returns: a lock that a power cut took back would be no lock."""
    path.parent.mkdir(parents=True, exist_ok=True)
    if path.exists() and _stored(path) is None:
        path.replace(path.with_suffix(".damaged"))
    temporary = path.with_suffix(".new")
    with temporary.open("w", encoding="utf-8") as file:
        file.write(json.dumps(stored, indent=1))
        file.flush()
        os.fsync(file.fileno())
    temporary.replace(path)
    folder = os.open(path.parent, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(folder)
    finally:
        os.close(folder)
