"""What the picture of a series shows, as plain numbers: one row a bar, its trace, and the statistics.
Draws nothing.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from daq.mechanics.quantity import Floats
from daq.results.reduce import trace_columns
from daq.series.factors import N_MIN, pivotal_bounds, unbiased_modulus
from daq.series.profile import WeibullBounds, profile_bounds
from daq.series.summary import Summary, summary_of
from daq.series.weibull import WeibullFit, fit_weibull
from daq.stream.rundata import RunData
from daq.stream.thin import thin_minmax

ROWS_MAX = 1_200  # of one trace: more than the picture has pixels
AXES = ("strain", "deflection_mm", "time_s")
START_SHARE = 0.004  # of the highest stress: the trace begins where the bar takes load
LEVEL = 0.90


@dataclass(frozen=True, slots=True, eq=False)
class BarRow:
    """strength_mpa: None for a bar that did not break; survived_mpa then. trace: (k, 2) axis and
    stress to the break.
    """

    name: str
    strength_mpa: float | None
    u_k2_mpa: float | None
    survived_mpa: float | None
    remarks: int
    trace: Floats


@dataclass(frozen=True, slots=True, eq=False)
class SeriesSheet:
    """Bars in firing order. axis: what the traces are drawn over, the same for all; source: where it
    comes from.
    """

    title: str
    bars: tuple[BarRow, ...]
    axis: str
    source: str
    simulated: bool
    summary: Summary | None
    fit: WeibullFit | None
    unbiased: float | None
    bounds: WeibullBounds | None

    @property
    def strengths_mpa(self) -> list[float]:
        return [bar.strength_mpa for bar in self.bars if bar.strength_mpa is not None]

    @property
    def survived_mpa(self) -> list[float]:
        return _survived(self.bars)


def sheet_of(records: Sequence[tuple[str, RunData, Mapping[str, Any]]], title: str) -> SeriesSheet:
    """From names, runs and results as they stand in the records; one bar without numbers does not
    spoil the rest.
    """
    traces = [trace_columns(run) for _, run, _ in records]
    axis = next((name for name in AXES if all(_drawable(trace, name) for trace in traces)), "time_s")
    bars = tuple(
        BarRow(
            name=name,
            strength_mpa=_number(result, "strength_mpa"),
            u_k2_mpa=_number(result, "strength_u_k2_mpa"),
            survived_mpa=_number(result, "stress_survived_mpa"),
            remarks=len(result.get("remarks") or ()),
            trace=_trace(trace, axis, _number(result, "break_at_s")),
        )
        for (name, _, result), trace in zip(records, traces, strict=True)
    )
    strengths = [bar.strength_mpa for bar in bars if bar.strength_mpa is not None]
    survived = _survived(bars)
    fit = fit_weibull(strengths, survived) if len(strengths) >= N_MIN else None
    bounds = None
    if fit is not None:
        bounds = profile_bounds(strengths, survived, LEVEL) if survived else pivotal_bounds(fit, LEVEL)
    sources = {str(result.get("displacement") or "") for _, _, result in records}
    return SeriesSheet(
        title=title,
        bars=bars,
        axis=axis,
        source=sources.pop() if len(sources) == 1 else "",
        simulated=any(_simulated(run) for _, run, _ in records),
        summary=summary_of(strengths),
        fit=fit,
        unbiased=None if fit is None else unbiased_modulus(fit),
        bounds=bounds,
    )


def _survived(bars: Sequence[BarRow]) -> list[float]:
    """Highest stress of each bar that never broke; an interrupted loading of a bar that broke later
    counts no more.
    """
    broken = {bar.name for bar in bars if bar.strength_mpa is not None}
    highest: dict[str, float] = {}
    for bar in bars:
        if bar.name not in broken and bar.survived_mpa:
            highest[bar.name] = max(bar.survived_mpa, highest.get(bar.name, 0.0))
    return list(highest.values())


def _simulated(run: RunData) -> bool:
    """What is not known to be real never counts as real."""
    frame = run.cards.get("frame")
    return not isinstance(frame, Mapping) or frame.get("simulated") is not False


def _number(result: Mapping[str, Any], key: str) -> float | None:
    value = result.get(key)
    if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
        return None
    return float(value)


def _drawable(trace: Mapping[str, Floats], axis: str) -> bool:
    return axis in trace and "stress_mpa" in trace and bool(np.isfinite(trace[axis]).sum() > 1)


def _trace(trace: Mapping[str, Floats], axis: str, break_at_s: float | None) -> Floats:
    """From first load to the break, thinned by extremes; time is counted from first load."""
    if not _drawable(trace, axis):
        return np.empty((0, 2))
    stress_mpa, time_s = trace["stress_mpa"], trace["time_s"]
    inside = np.isfinite(trace[axis]) & np.isfinite(stress_mpa)
    if break_at_s is not None:
        inside &= time_s <= break_at_s
    top_mpa = float(np.max(stress_mpa[inside], initial=0.0))
    low = np.flatnonzero(
        inside & (stress_mpa < START_SHARE * top_mpa) & (time_s < _top_s(time_s, stress_mpa, inside))
    )
    if low.size:
        inside[: int(low[-1])] = False
    rows = np.column_stack((trace[axis][inside], stress_mpa[inside]))
    if axis == "time_s" and rows.size:
        rows[:, 0] -= rows[0, 0]
    return thin_minmax(rows, 1, ROWS_MAX)


def _top_s(time_s: Floats, stress_mpa: Floats, inside: npt.NDArray[np.bool_]) -> float:
    """When the stress was highest."""
    return float(time_s[int(np.argmax(np.where(inside, stress_mpa, -np.inf)))]) if inside.any() else math.nan
