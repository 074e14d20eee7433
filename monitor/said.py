"""What stands for one loading after all notes: a value. Pure."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Said:
    """What stands for one loading: verdict with its reason, strength that stands, breaks in mm from mid-span."""

    verdict: str
    reason: str = ""
    by: str = ""
    strength_mpa: float | None = None
    from_mid_mm: tuple[float, ...] = ()
    notes: int = 0
