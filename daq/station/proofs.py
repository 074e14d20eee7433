"""Proofs: polarity check and stop drill as recorded for one card, wiring and version. A change of any voids them."""

from __future__ import annotations

import hashlib
import json
from pathlib import Path
from typing import Any

from daq.cards.frame import FrameCard
from daq.version import VERSION

KINDS = ("polarity", "stop_drill")


def card_digest(frame: FrameCard) -> str:
    """SHA-256 of the resolved card."""
    return hashlib.sha256(frame.model_dump_json().encode()).hexdigest()


def read_proofs(path: Path, frame: FrameCard) -> dict[str, bool]:
    """{"polarity": bool, "stop_drill": bool}; a simulated frame has both."""
    if frame.simulated:
        return dict.fromkeys(KINDS, True)
    try:
        stored: dict[str, Any] = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        stored = {}
    return {kind: is_valid(stored.get(kind), frame) for kind in KINDS}


def is_valid(proof: object, frame: FrameCard) -> bool:
    return (
        isinstance(proof, dict)
        and proof.get("card") == card_digest(frame)
        and proof.get("version") == VERSION
    )


def write_proof(path: Path, frame: FrameCard, kind: str, found: dict[str, Any]) -> None:
    """Add one proof; earlier ones of the same kind are kept under "earlier"."""
    assert kind in KINDS
    try:
        stored = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        stored = {}
    if kind in stored:
        stored.setdefault("earlier", []).append(stored[kind])
    stored[kind] = {**found, "card": card_digest(frame), "version": VERSION}
    path.parent.mkdir(parents=True, exist_ok=True)
    temporary = path.with_suffix(".new")
    temporary.write_text(json.dumps(stored, indent=1), encoding="utf-8")
    temporary.replace(path)
