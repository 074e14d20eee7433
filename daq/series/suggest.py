"""Suggestions of the planner: cell, speed, sample rate, number of bars. A person decides; nothing is changed.

Cells, rates and numbers of bars come from the usual 1-2-5 ladder (common practice, no source).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from daq.series.factors import N_MIN, modulus_range
from daq.series.gates import SAMPLES_MIN, SAMPLING_GREEN, WORKING_SHARE
from daq.series.plan import FILTER_SHARE, Plan

BARS_SHOWN = (5, 10, 15, 20, 30, 50, 100)
BARS_MAX = 500
WIDTHS = (1.0, 0.6, 0.4, 0.3)  # of the 95 % range of m, as shares of the estimate
RAW_LOSS = 1e-3  # of an indicated maximum that is to stand for the break
RATE_HZ_MIN = 10.0  # the slowest stream that the fracture watch was measured with


@dataclass(frozen=True, slots=True)
class BarsRow:
    """What n bars buy: the true modulus lies in [low, high] times the estimated one, at 95 %."""

    bars: int
    low: float
    high: float


@dataclass(frozen=True, slots=True)
class Suggestion:
    """cell_n: smallest usual capacity that P99.9 loads to 80 % at most.

    speed_window_mm_min: speeds that keep the mean bar inside the windows of time, strain rate and speed; None where
    there are no windows. speed_mm_min: the planned speed where it lies inside, else the middle; None where the windows
    exclude each other. sample_rate_hz: None where the lag alone is too much; bandwidth_hz is the least first-order
    bandwidth that would do. raw_rate_hz: where the highest raw sample itself is to be within 0.1 %. widths: (width of
    the 95 % range of m over its estimate, bars).
    """

    cell_n: float
    speed_mm_min: float | None
    speed_window_mm_min: tuple[float, float] | None
    sample_rate_hz: float | None
    bandwidth_hz: float
    raw_rate_hz: float
    bars: tuple[BarsRow, ...]
    widths: tuple[tuple[float, int], ...]


def suggest(plan: Plan) -> Suggestion:
    """Everything a person may want to change."""
    window = speed_window(plan)
    speed: float | None = plan.speed_mm_min
    if window is not None and not window[0] <= plan.speed_mm_min <= window[1]:
        speed = math.sqrt(window[0] * window[1]) if window[0] <= window[1] else None
    return Suggestion(
        cell_n=ladder_up(plan.at("P99.9").load_n / WORKING_SHARE),
        speed_mm_min=speed,
        speed_window_mm_min=window,
        sample_rate_hz=sample_rate_hz(plan.mean.time_s, plan.bench.time_constant_s or 0.0),
        bandwidth_hz=2.0 * FILTER_SHARE / (SAMPLING_GREEN * plan.mean.time_s),
        raw_rate_hz=last_sample_rate_hz(plan.mean.time_s, RAW_LOSS),
        bars=tuple(row for n in BARS_SHOWN if (row := bars_row(n)) is not None),
        widths=tuple((width, n) for width in WIDTHS if (n := bars_for(width)) is not None),
    )


def speed_window(plan: Plan) -> tuple[float, float] | None:
    """Slowest and fastest crosshead speed of all windows together; the first above the second where they clash."""
    method, windows = plan.method, []
    scale = plan.speed_mm_min
    if method.time_to_break_s is not None:
        low_s, high_s = method.time_to_break_s
        windows.append((scale * plan.mean.time_s / high_s, scale * plan.mean.time_s / low_s))
    if method.validity.strain_rate_per_s is not None:
        low, high = (rate / plan.strain_rate_per_s for rate in method.validity.strain_rate_per_s)
        windows.append((scale * low, scale * high))
    if method.rate.speed_band_mm_min is not None:
        windows.append(method.rate.speed_band_mm_min)
    for band, planned in (
        (method.rate.band_n_s, plan.force_rate_n_s),
        (method.rate.band_mpa_s, plan.stress_rate_mpa_s),
    ):
        if band is not None:
            windows.append((scale * band[0] / planned, scale * band[1] / planned))
    if plan.bench.speed_mm_min is not None and windows:
        windows.append(plan.bench.speed_mm_min)
    if not windows:
        return None
    return max(low for low, _ in windows), min(high for _, high in windows)


def sample_rate_hz(time_s: float, lag_s: float) -> float | None:
    """Least usual rate with (half a sample + lag) below 0.1 % of the time to break; None: the lag alone is more."""
    left_s = SAMPLING_GREEN * time_s - lag_s
    if left_s <= 0:
        return None
    return ladder_up(max(0.5 / left_s, SAMPLES_MIN / time_s, RATE_HZ_MIN))


def last_sample_rate_hz(time_s: float, loss: float) -> float:
    """Rate at which the last sample before a sudden break is low by at most this share: 1/(loss t)."""
    return 1.0 / (loss * time_s)


def bars_row(bars: int) -> BarsRow | None:
    """95 % range of m over its estimate; None below 5 bars."""
    found = modulus_range(bars, 0.95)
    return None if found is None else BarsRow(bars, *found)


def bars_for(width: float) -> int | None:
    """Fewest bars whose 95 % range of m is no wider than this share of the estimate; None beyond 500 bars.

    Width = (high - low); a width of 0.6 means for example 0.71 to 1.27 times the estimate.
    """
    for bars in range(N_MIN, BARS_MAX + 1):
        row = bars_row(bars)
        if row is not None and row.high - row.low <= width:
            return bars
    return None


def ladder_up(value: float) -> float:
    """Next of 1, 2, 5, 10, 20, 50, ... that is not below the value."""
    assert value > 0 and math.isfinite(value)
    decade = 10.0 ** math.floor(math.log10(value))
    return next(
        step * decade for step in (1.0, 2.0, 5.0, 10.0, 20.0) if step * decade >= value * (1.0 - 1e-9)
    )
