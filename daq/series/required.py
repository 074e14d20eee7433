"""What a report must hold by its method card, and what of it is missing: it then says so on each page."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from daq.cards.validity import ReportField
from daq.series.leaf import Series

# Where the card names nothing: what every catalogue of flexure standards asks for (from memory).
ALWAYS: tuple[ReportField, ...] = (
    "material", "operator", "day", "frame", "fixture", "spans", "bars", "dimensions", "rate", "strengths",
)  # fmt: skip


def missing_fields(series: Series) -> tuple[str, ...]:
    """In words, in the order of the card; empty where the report is whole."""
    asked = dict.fromkeys((*ALWAYS, *(series.method.report_fields if series.method is not None else ())))
    return tuple(MISSING_WORDS.get(name, name) for name in asked if not _there(name, series))


MISSING_WORDS: Mapping[str, str] = {
    "break place": "break place of every broken bar",
    "origins": "fracture origin of every broken bar",
    "deviations": "deviations from the standard (in a remark)",
}


def _there(name: ReportField, series: Series) -> bool:
    check = CHECKS.get(name)
    return bool(series.leaves) and (check is None or check(series))


def _run(series: Series, key: str) -> bool:
    return all(_of_run(leaf.standing.cards, key) for leaf in series.leaves)


def _of_run(cards: Mapping[str, Any], key: str) -> bool:
    run = cards.get("run")
    return isinstance(run, Mapping) and run.get(key) not in (None, "")


def _broken(series: Series) -> list[Any]:
    return [leaf.standing for leaf in series.leaves if leaf.standing.result.get("strength_mpa") is not None]


def _each(series: Series, key: str) -> bool:
    return all(standing.result.get(key) is not None for standing in _broken(series))


def _specimen(series: Series, key: str) -> bool:
    return all((leaf.standing.cards.get("specimen") or {}).get(key) for leaf in series.leaves)


def _setup(series: Series, what: str) -> bool:
    return all(getattr(leaf.standing.setup, what) is not None for leaf in series.leaves)


CHECKS: Mapping[ReportField, Callable[[Series], bool]] = {
    "standard": lambda s: s.method is not None and bool(s.method.standard),
    "deviations": lambda s: True,  # every remark and every fixture off the method's is listed
    "material": lambda s: _run(s, "material"),
    "conditioning": lambda s: _specimen(s, "note"),
    "surface": lambda s: _specimen(s, "note"),
    "direction": lambda s: _specimen(s, "note"),
    "moisture": lambda s: _specimen(s, "note"),
    "age": lambda s: _specimen(s, "note"),
    "operator": lambda s: _run(s, "operator"),
    "day": lambda s: all(leaf.meta.get("created_utc") for leaf in s.leaves),
    "frame": lambda s: _setup(s, "frame"),
    "fixture": lambda s: _setup(s, "fixture"),
    "spans": lambda s: _setup(s, "spans"),
    "bars": lambda s: True,
    "dimensions": lambda s: _setup(s, "section"),
    "rate": lambda s: _each(s, "force_rate_mean_n_s"),
    "time to break": lambda s: _each(s, "time_to_break_s"),
    "temperature": lambda s: _run(s, "temperature_c"),
    "humidity": lambda s: _run(s, "humidity_percent"),
    "loads": lambda s: _each(s, "peak_n"),
    "strengths": lambda s: bool(_broken(s)),
    "breaking strength": lambda s: _each(s, "breaking_strength_n"),
    "mean": lambda s: s.analysis.summary is not None,
    "standard deviation": lambda s: (
        s.analysis.summary is not None and s.analysis.summary.spread_mpa is not None
    ),
    "weibull": lambda s: s.analysis.weibull is not None,
    "modulus": lambda s: _each(s, "modulus_gpa"),
    "deflection": lambda s: _each(s, "deflection_at_break_mm"),
    "break place": lambda s: all(standing.place is not None for standing in _broken(s)),
    "origins": lambda s: all(standing.origin is not None for standing in _broken(s)),
    "uncertainty": lambda s: _each(s, "uncertainty"),
}
