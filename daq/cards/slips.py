"""Slip: a value that looks like a slip of unit, order or sign; and the factors that units are off by."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Slip:
    """What stands there, why it looks wrong, what it may have meant."""

    key: str
    value: str
    text: str
    suggestion: str
    must_correct: bool = False


@dataclass(frozen=True, slots=True)
class UnitSlip:
    """value * factor would be the wanted value; unit: what the value may have been typed in."""

    factor: float
    unit: str
    words: str


LENGTH_SLIPS = (
    UnitSlip(25.4, "inch", "1/25.4"),
    UnitSlip(1.0 / 25.4, "mm converted as if it were inch", "25.4 times the size"),
    UnitSlip(10.0, "cm", "a tenth"),
    UnitSlip(0.1, "a slipped decimal point", "ten times the size"),
    UnitSlip(1000.0, "m", "a thousandth"),
    UnitSlip(0.001, "um", "a thousand times the size"),
    UnitSlip(100.0, "a slipped decimal point", "a hundredth"),
    UnitSlip(0.01, "a slipped decimal point", "a hundred times the size"),
)


def unit_slip(value: float, nominal: float, share: float) -> UnitSlip | None:
    """The factor by which a value misses its nominal, when one of the usual ones explains it within share."""
    if abs(value - nominal) <= share * nominal:
        return None
    for slip in LENGTH_SLIPS:
        if abs(value * slip.factor - nominal) <= share * nominal:
            return slip
    return None
