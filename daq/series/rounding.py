"""Rounding once, at the report: to a step, ties to even. Numbers are computed unrounded; ASTM E29
form (confirmed).
"""

from __future__ import annotations

from decimal import ROUND_HALF_EVEN, Decimal


def round_to_step(value: float | Decimal | str, step: Decimal | str) -> Decimal:
    """The multiple of `step` nearest to value; exactly between two, the even multiple. 45.45 as text
    is a tie, the binary number nearest to 45.45 is not.
    """
    multiple = (Decimal(value) / Decimal(step)).quantize(Decimal(1), rounding=ROUND_HALF_EVEN)
    return multiple * Decimal(step)
