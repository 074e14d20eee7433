"""How the bar stands: what the drawing is given. Pure."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Posture:
    """sag_mm: mid-span, None where it is not measured; share: of the expected break load."""

    sag_mm: float | None = None
    share: float = 0.0
    broken: bool = False
    breaks_mm: tuple[float, ...] = ()  # marked places, from the bar's left end
    may_mark: bool = False
    stress_first: bool = False  # the stress is the chief number
