"""Achieved rates: slopes over 0.5 s between seated and 95 % of the peak, and whether the drive hesitated.

The nominal rate is what was asked for; strength depends on the rate that was there.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from daq.results.fits import fit_curve
from daq.stream.block import Floats

WINDOW_S = 0.5
WINDOW_SAMPLES = 4
END_SHARE = 0.95
STEP_SHARE = 0.25
STEP_SIGMAS = 4.0


@dataclass(frozen=True, slots=True)
class Rates:
    """Force rates in N/s. interrupted_s: time in which the rate lay more than 25 % off its median (beyond
    noise).
    """

    mean_n_s: float
    min_n_s: float
    max_n_s: float
    from_s: float
    to_s: float
    interrupted_s: float


def rates_of(time_s: Floats, load_n: Floats, *, from_s: float, peak_n: float, until_s: float) -> Rates | None:
    """None where fewer than two windows fit between seated and 95 % of the peak. Samples are screened."""
    first = int(np.searchsorted(time_s, from_s))
    end = int(np.searchsorted(time_s, until_s, side="right"))
    reached = np.flatnonzero(load_n[first:end] >= END_SHARE * peak_n)
    if reached.size:
        end = first + int(reached[0]) + 1
    t, n = time_s[first:end], load_n[first:end]
    if t.size < 2 * WINDOW_SAMPLES:
        return None
    centre_s, slope, u_slope = rolling_slopes(t, n)
    if slope.size == 0:
        return None
    median = float(np.median(slope))
    off = np.abs(slope - median) > np.maximum(STEP_SHARE * abs(median), STEP_SIGMAS * u_slope)
    return Rates(
        mean_n_s=fit_curve(t, n, 2).slope,
        min_n_s=float(slope.min()),
        max_n_s=float(slope.max()),
        from_s=float(t[0]),
        to_s=float(t[-1]),
        interrupted_s=_lasting_s(centre_s, off),
    )


def rolling_slopes(time_s: Floats, load_n: Floats) -> tuple[Floats, Floats, Floats]:
    """Centre, slope and its standard error for each window of 0.5 s (or of all, where the run is shorter).

    Cumulative sums about the middle of the run: one pass, whatever the sample rate.
    """
    t, n = time_s - time_s[0], load_n - load_n[0]
    span_s = min(WINDOW_S, float(t[-1]))
    ends = np.searchsorted(t, t + span_s * (1.0 + 1e-9), side="right")
    starts = np.arange(t.size)
    whole = (t + span_s <= t[-1] * (1.0 + 1e-9)) & (ends - starts >= WINDOW_SAMPLES)
    starts, ends = starts[whole], ends[whole]
    sums = [np.concatenate(([0.0], np.cumsum(column))) for column in (t, n, t * t, t * n, n * n)]
    s_t, s_n, s_tt, s_tn, s_nn = (column[ends] - column[starts] for column in sums)
    count = (ends - starts).astype(np.float64)
    c_tt = s_tt - s_t * s_t / count
    c_tn = s_tn - s_t * s_n / count
    c_nn = s_nn - s_n * s_n / count
    slope = c_tn / c_tt
    rest = np.maximum(c_nn - slope * c_tn, 0.0) / np.maximum(count - 2.0, 1.0)
    return time_s[0] + s_t / count, slope, np.sqrt(rest / c_tt)


def _lasting_s(centre_s: Floats, off: npt.NDArray[np.bool_]) -> float:
    """Time off the median rate; half a window less, which is what a window's own width adds to a real
    stop.
    """
    if not off.any() or centre_s.size < 2:
        return 0.0
    steps_s = np.diff(centre_s, append=2.0 * centre_s[-1] - centre_s[-2])
    return max(float(steps_s[off].sum()) - WINDOW_S / 2.0, 0.0)
