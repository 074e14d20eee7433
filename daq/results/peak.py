"""The load at the instant of the break, from the samples before it.

Sudden break: a line (a parabola where its bend is significant at 3 sigma) over the last W of screened
samples, carried to the middle of the interval in which the break lies, plus the lag of a declared filter.
Gradual failure: the top of a local parabola, never carried beyond the samples. The raw maximum is always
kept beside it: it is low by sampling and lag, and high by noise.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import Enum

import numpy as np
import numpy.typing as npt

from daq.results.fits import Curve, fit_curve, robust_spread
from daq.results.samples import SCREEN_SHARE, SCREEN_SIGMAS
from daq.stream.block import Floats

WINDOW_S = 0.3  # shortest W
WINDOW_SAMPLES = 5
WINDOW_SHARE_SHORT = 0.3  # of the time to break: keeps 0.3 s out of the toe of a one-second test
WINDOW_SHARE_LONG = 0.1  # of the time to break: W may grow so far to beat noise
FIT_GOAL = 2e-4  # of the load: noise below this needs no longer W
BEND_SIGMAS = 3.0
BEND_SAMPLES = 8
ONSET_SIGMAS = 3.0
GUARD_PART = 10  # the last tenth of W stays out of the curve that judges it
TOP_SHARE = 0.01  # of the load: how far below the top the fall side of a gradual failure is used


class PeakMethod(Enum):
    LINE = "line to the break"
    PARABOLA = "parabola to the break"
    SMOOTH_TOP = "top of a local parabola"
    LAST_SAMPLE = "last sample before the break"


@dataclass(frozen=True, slots=True)
class Onset:
    """The break lies between these two samples' times."""

    last_good_s: float
    first_dropped_s: float

    @property
    def middle_s(self) -> float:
        return (self.last_good_s + self.first_dropped_s) / 2.0

    @property
    def width_s(self) -> float:
        return self.first_dropped_s - self.last_good_s


@dataclass(frozen=True, slots=True)
class Peak:
    """load_n net at the break. lag_n: part of it that is the filter's lag; u_*: standard uncertainties."""

    load_n: float
    method: PeakMethod
    onset_s: float
    window_s: float
    samples: int
    rate_n_s: float
    lag_n: float
    sigma_n: float
    u_fit_n: float
    u_onset_n: float
    u_lag_n: float

    @property
    def u_n(self) -> float:
        return math.sqrt(self.u_fit_n**2 + self.u_onset_n**2 + self.u_lag_n**2)


def recover_break(
    time_s: Floats,
    load_n: Floats,
    onset: Onset,
    *,
    from_s: float,
    sigma_n: float,
    time_constant_s: float = 0.0,
    u_time_constant_s: float = 0.0,
) -> Peak | None:
    """Sudden break. Samples are screened; from_s: none before it is used. None without any sample to use."""
    before = (time_s >= from_s) & (time_s <= onset.last_good_s)
    if not before.any():
        return None
    good_s, good_n = time_s[before], load_n[before]
    window_s = _window_s(good_s, good_n, onset.last_good_s - from_s, sigma_n)
    kept = good_s >= onset.last_good_s - window_s
    guarded = kept.copy()
    guarded[good_s.size - int(kept.sum()) // GUARD_PART :] = False
    curve = _robust_curve(good_s[guarded], good_n[guarded], sigma_n)
    if curve is None:
        return _last_sample(good_s, good_n, onset, sigma_n)
    onset = _walk_back(good_s, good_n, curve, onset, sigma_n)
    still = kept & (good_s <= onset.last_good_s)
    curve = _robust_curve(good_s[still], good_n[still], sigma_n) or curve
    rate_n_s = curve.slope_at(onset.middle_s)
    lag_n = rate_n_s * time_constant_s
    noise_n = _noise(curve, sigma_n)
    return Peak(
        load_n=curve.at(onset.middle_s) + lag_n,
        method=PeakMethod.PARABOLA if curve.terms == 3 else PeakMethod.LINE,
        onset_s=onset.middle_s,
        window_s=float(good_s[kept][-1] - good_s[kept][0]),
        samples=curve.count,
        rate_n_s=rate_n_s,
        lag_n=lag_n,
        sigma_n=noise_n,
        u_fit_n=curve.u_at(onset.middle_s, noise_n),
        u_onset_n=abs(rate_n_s) * onset.width_s / math.sqrt(12.0),
        u_lag_n=abs(rate_n_s) * u_time_constant_s,
    )


def _noise(curve: Curve, sigma_n: float) -> float:
    """The larger of what the watch knew and what the residuals show."""
    return sigma_n if not curve.spread > sigma_n else curve.spread


def _window_s(time_s: Floats, load_n: Floats, time_to_break_s: float, sigma_n: float) -> float:
    """W: at least 0.3 s and 5 samples; longer, to a tenth of the time to break, only where noise asks for
    it.
    """
    period_s = float(np.median(np.diff(time_s))) if time_s.size > 1 else WINDOW_S
    shortest_s = max(min(WINDOW_S, WINDOW_SHARE_SHORT * time_to_break_s), (WINDOW_SAMPLES - 0.5) * period_s)
    longest_s = max(shortest_s, WINDOW_SHARE_LONG * time_to_break_s)
    goal_n = FIT_GOAL * abs(float(load_n[-1]))
    wanted = (2.0 * sigma_n / goal_n) ** 2 if goal_n > 0 else 0.0  # a line's end: u = 2 sigma/sqrt(n)
    return min(max(shortest_s, wanted * period_s), longest_s)


def _robust_curve(time_s: Floats, load_n: Floats, sigma_n: float) -> Curve | None:
    """Line, or parabola where its bend is significant; outliers beyond max(6 sigma, 2 %) left out in two
    rounds.
    """
    keep = np.ones(time_s.size, dtype=np.bool_)
    for _ in range(2):
        if keep.sum() < 3:
            return None
        curve = _curve(time_s[keep], load_n[keep], sigma_n)
        forecast_n = _curve_values(curve, time_s)
        residual_n = load_n - forecast_n
        spread_n = max(sigma_n, robust_spread(residual_n))
        agree = np.abs(residual_n) <= np.maximum(SCREEN_SIGMAS * spread_n, SCREEN_SHARE * np.abs(forecast_n))
        if bool(np.array_equal(agree, keep)):
            return curve
        keep = agree
    return _curve(time_s[keep], load_n[keep], sigma_n) if keep.sum() >= 3 else None


def _curve(time_s: Floats, load_n: Floats, sigma_n: float) -> Curve:
    line = fit_curve(time_s, load_n, 2)
    if time_s.size < BEND_SAMPLES:
        return line
    bent = fit_curve(time_s, load_n, 3)
    return bent if abs(bent.bend) > BEND_SIGMAS * bent.u_term(2, _noise(bent, sigma_n)) else line


def _curve_values(curve: Curve, time_s: Floats) -> Floats:
    d = time_s - curve.origin
    return curve.value + curve.slope * d + curve.bend * d * d


def _walk_back(time_s: Floats, load_n: Floats, curve: Curve, onset: Onset, sigma_n: float) -> Onset:
    """A slow filter rounds the edge: the last samples called good may already lie below the curve. Go back
    over them.
    """
    allowed_n = -ONSET_SIGMAS * _noise(curve, sigma_n)
    last = time_s.size - 1
    while last > 0 and load_n[last] - curve.at(float(time_s[last])) < allowed_n:
        last -= 1
    if last == time_s.size - 1:
        return onset
    return Onset(float(time_s[last]), float(time_s[last + 1]))


def _last_sample(time_s: Floats, load_n: Floats, onset: Onset, sigma_n: float) -> Peak:
    """Too few samples for a line: the last one, and the whole of its distance to the one before as
    uncertainty.
    """
    step_n = abs(float(load_n[-1] - load_n[-2])) if load_n.size > 1 else abs(float(load_n[-1]))
    return Peak(
        load_n=float(load_n[-1]),
        method=PeakMethod.LAST_SAMPLE,
        onset_s=onset.middle_s,
        window_s=0.0,
        samples=1,
        rate_n_s=math.nan,
        lag_n=0.0,
        sigma_n=sigma_n,
        u_fit_n=sigma_n,
        u_onset_n=step_n,
        u_lag_n=0.0,
    )


def smooth_top(
    time_s: Floats, load_n: Floats, *, from_s: float, until_s: float, sigma_n: float
) -> Peak | None:
    """Gradual failure: the highest value of a parabola through the top, inside the samples. Samples are
    screened.

    Where the load falls off at once after the top, only samples within 1 % of it count on the falling side.
    """
    inside = (time_s >= from_s) & (time_s <= until_s)
    if inside.sum() < WINDOW_SAMPLES:
        return None
    t, n = time_s[inside], load_n[inside]
    top = int(np.argmax(n))
    period_s = float(np.median(np.diff(t)))
    half_s = max(WINDOW_S, WINDOW_SAMPLES * period_s)
    near = _top_samples(t, n, top, half_s, sigma_n)
    if near.sum() < WINDOW_SAMPLES:
        near = np.abs(t - t[top]) <= half_s
    curve = fit_curve(t[near], n[near], 3)
    at_s = _highest_s(curve, float(t[near][0]), float(t[near][-1]))
    noise_n = _noise(curve, sigma_n)
    return Peak(
        load_n=curve.at(at_s),
        method=PeakMethod.SMOOTH_TOP,
        onset_s=at_s,
        window_s=float(t[near][-1] - t[near][0]),
        samples=curve.count,
        rate_n_s=curve.slope_at(float(t[near][0])),
        lag_n=0.0,
        sigma_n=noise_n,
        u_fit_n=curve.u_at(at_s, noise_n),
        u_onset_n=abs(curve.slope_at(at_s)) * period_s / math.sqrt(12.0),
        u_lag_n=0.0,
    )


def _top_samples(
    time_s: Floats, load_n: Floats, top: int, half_s: float, sigma_n: float
) -> npt.NDArray[np.bool_]:
    """The rise before the top, and the connected fall after it down to 1 % or 6 sigma below."""
    rise: npt.NDArray[np.bool_] = (time_s >= time_s[top] - half_s) & (time_s <= time_s[top])
    floor_n = load_n[top] - max(TOP_SHARE * abs(float(load_n[top])), SCREEN_SIGMAS * sigma_n)
    after = np.flatnonzero((time_s > time_s[top]) & ((load_n < floor_n) | (time_s > time_s[top] + half_s)))
    end = int(after[0]) if after.size else time_s.size
    fall = np.zeros(time_s.size, dtype=np.bool_)
    fall[top:end] = True
    return rise | fall


def _highest_s(curve: Curve, first_s: float, last_s: float) -> float:
    """Where the parabola is highest between the first and the last of its samples."""
    places = [first_s, last_s]
    if curve.bend < 0:
        vertex_s = curve.origin - curve.slope / (2.0 * curve.bend)
        if first_s < vertex_s < last_s:
            places.append(vertex_s)
    return max(places, key=curve.at)
