"""Numbers in words for the report: rounded once, here, ties to even where the method names a step."""

from __future__ import annotations

import math
from collections.abc import Iterable
from decimal import Decimal

from daq.cards.method import MethodCard
from daq.series.profile import Interval
from daq.series.rounding import round_to_step

NONE = "–"


def number(value: float | None, decimals: int = 1) -> str:
    """A dash where there is none."""
    if value is None or not math.isfinite(value):
        return NONE
    return f"{round(value, decimals) + 0.0:.{decimals}f}"  # never -0.0


def chance(probability: float) -> str:
    """Two digits; never a zero."""
    return "below 0.0001" if probability < 1e-4 else digits(probability, 2)


def digits(value: float | None, significant: int = 4) -> str:
    """So many significant digits, never in powers of ten within what bars show."""
    if value is None or not math.isfinite(value):
        return NONE
    if value == 0.0:
        return "0"
    places = significant - 1 - math.floor(math.log10(abs(value)))
    step = Decimal(1).scaleb(-places)
    rounded = round_to_step(Decimal(repr(value)), step)
    return f"{rounded:f}"


def stress(value: float | None, method: MethodCard | None) -> str:
    """By the method's rounding; four digits without one."""
    if value is None:
        return NONE
    rounding = None if method is None else method.rounding
    if rounding is not None and rounding.stress_step_mpa is not None:
        return f"{round_to_step(Decimal(repr(value)), Decimal(repr(rounding.stress_step_mpa))).normalize():f}"
    return digits(value, 4 if rounding is None or rounding.stress_digits is None else rounding.stress_digits)


def span(interval: Interval | None, decimals: int) -> str:
    """Low to high; a bound that the data do not set is a question mark."""
    if interval is None:
        return NONE
    ends = ["?" if end is None else f"{end:.{decimals}f}" for end in (interval.low, interval.high)]
    return " to ".join(ends)


def one_or_range(values: Iterable[float | None], decimals: int, unit: str) -> str:
    """The same for all, or from the least to the most; how many are missing is said."""
    listed = list(values)
    known = [value for value in listed if value is not None]
    if not known:
        return "not recorded"
    low, high = (number(end, decimals) for end in (min(known), max(known)))
    text = f"{low} {unit}" if low == high else f"{low} to {high} {unit}"
    missing = len(listed) - len(known)
    return text if not missing else f"{text} ({missing} of {len(listed)} not recorded)"


def listed(texts: Iterable[str]) -> str:
    """Each once, in order."""
    found = [text for text in dict.fromkeys(texts) if text]
    return ", ".join(found) if found else "not recorded"
