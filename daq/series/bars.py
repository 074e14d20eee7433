"""Bars of a series as the statistics see them: one row a loading, from what stands. Judges nothing, drops nothing."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from daq.mechanics.sections import Section, Spans
from daq.results.rules import Counting
from daq.results.standing import Standing

COMMON = frozenset(
    {"force reading", "support span", "load span"}
)  # the same error in every bar of a frame and fixture


@dataclass(frozen=True, slots=True)
class Bar:
    """order: place in the order of loading, from 1. strength_mpa: None unless it counts (or is provisional).

    suspended_mpa: highest stress of one that does not count or was interrupted: it bore so much. common_share and
    own_share: standard uncertainty over the strength, of what all bars share and of what is the bar's own.
    """

    number: str
    loading: int
    order: int
    counting: Counting
    strength_mpa: float | None
    suspended_mpa: float | None
    method: str
    section: Section | None
    spans: Spans | None
    population: str
    from_mid_mm: float | None
    roller_diameter_mm: float
    common_share: float | None
    own_share: float | None
    values: Mapping[str, float]


TREND_KEYS = {  # against what strength is correlated: name in words, key of the result
    "stress rate, MPa/s": "stress_rate_mean_mpa_s",
    "modulus, GPa": "modulus_gpa",
    "zero shift, N": "after_zero_n",
}
RUN_KEYS = {"temperature, °C": "temperature_c", "humidity, %": "humidity_percent"}


def bar_of(standing: Standing, *, number: str, loading: int, order: int) -> Bar:
    """From what stands for one loading."""
    result = standing.result
    strength = standing.strength_mpa if standing.counts else None
    suspended = None
    if strength is None:
        suspended = standing.strength_mpa or _number(result, "stress_survived_mpa")
    shares = _shares(result)
    setup = standing.setup
    return Bar(
        number=number,
        loading=loading,
        order=order,
        counting=standing.verdict.counting,
        strength_mpa=strength,
        suspended_mpa=suspended,
        method="" if setup.method is None else setup.method.name,
        section=setup.section,
        spans=setup.spans,
        population="" if standing.origin is None else standing.origin.population,
        from_mid_mm=None if standing.place is None else standing.place.from_mid_mm,
        roller_diameter_mm=0.0 if setup.fixture is None else setup.fixture.roller_diameter_mm,
        common_share=shares[0],
        own_share=shares[1],
        values=_values(standing, order),
    )


def _values(standing: Standing, order: int) -> dict[str, float]:
    found: dict[str, float | None] = {"order": float(order)}
    if standing.setup.section is not None:
        found["thickness, mm"] = standing.setup.section.depth_mm
        found["width, mm"] = getattr(standing.setup.section, "width_mm", None)
    found |= {words: _number(standing.result, key) for words, key in TREND_KEYS.items()}
    run = standing.cards.get("run")
    found |= {words: _number(run if isinstance(run, Mapping) else {}, key) for words, key in RUN_KEYS.items()}
    return {words: value for words, value in found.items() if value is not None}


def _shares(result: Mapping[str, Any]) -> tuple[float | None, float | None]:
    """Contributors as sealed, in percent, put together in quadrature: common to the series, own to the bar."""
    budget = result.get("uncertainty")
    parts = budget.get("contributors") if isinstance(budget, Mapping) else None
    if not parts:
        return None, None
    common = math.fsum((part["percent"] / 100.0) ** 2 for part in parts if part["name"] in COMMON)
    own = math.fsum((part["percent"] / 100.0) ** 2 for part in parts if part["name"] not in COMMON)
    return math.sqrt(common), math.sqrt(own)


def _number(values: Mapping[str, Any], key: str) -> float | None:
    value = values.get(key)
    if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
        return None
    return float(value)


@dataclass(frozen=True, slots=True)
class Pooled:
    """bars: those that may be put together; apart: the others, listed but not pooled; problems: why, one line each."""

    bars: tuple[Bar, ...]
    apart: tuple[Bar, ...]
    problems: tuple[str, ...]


def pooled(bars: Sequence[Bar]) -> Pooled:
    """Bars of the most frequent method, loading and kind of section. A loading of a bar that broke in a later one, or
    was loaded higher in another, says nothing of its own and is left out of the statistics without a word."""
    problems: list[str] = []
    left = list(bars)
    apart: list[Bar] = []
    for what, key in (("method", _method), ("loading", _loading), ("section", _kind)):
        kinds = Counter(key(bar) for bar in left)
        if len(kinds) < 2:
            continue
        main = kinds.most_common(1)[0][0]
        others = [bar for bar in left if key(bar) != main]
        listed = ", ".join(f"{bar.number} ({key(bar)})" for bar in others[:5]) + (
            ", ..." if len(others) > 5 else ""
        )
        problems.append(
            f"mixed series: {len(others)} of {len(left)} bars are of another {what} than {main}: {listed};"
            " set apart, not pooled - report them as a series of their own"
        )
        apart += others
        left = [bar for bar in left if key(bar) == main]
    return Pooled(tuple(_once(left)), tuple(apart), tuple(problems))


def _method(bar: Bar) -> str:
    return bar.method or "no readable method"


def _loading(bar: Bar) -> str:
    spans = bar.spans
    if spans is None:
        return "spans not known"
    return (
        f"{spans.support_mm:g}/{spans.load_mm:g} mm"
        if spans.load_mm
        else f"{spans.support_mm:g} mm three-point"
    )


def _kind(bar: Bar) -> str:
    return "sizes not known" if bar.section is None else type(bar.section).__name__.lower()


def _once(bars: Sequence[Bar]) -> list[Bar]:
    """One row a bar: its break, else its highest loading."""
    best: dict[str, Bar] = {}
    for bar in bars:
        other = best.get(bar.number)
        if other is None or _rank(bar) > _rank(other):
            best[bar.number] = bar
    return [bar for bar in bars if best[bar.number] is bar]


def _rank(bar: Bar) -> tuple[bool, bool, float]:
    interrupted = bar.counting is Counting.INTERRUPTED
    return bar.strength_mpa is not None, not interrupted, bar.suspended_mpa or 0.0
