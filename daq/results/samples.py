"""Samples: the force of a run made fit for computing - net, finite, in time order - with outliers screened
out.

Nothing is filled in: a hole stays a hole and is counted. Displacement of another link is set beside the
force samples by straight lines between its own samples, which is said in the result.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from daq.results.fits import robust_spread
from daq.stream.block import Floats
from daq.stream.rundata import ChannelData, RunData

SCREEN_SIGMAS = 6.0  # trade judgement, no source
SCREEN_SHARE = 0.02  # of the forecast; carries the load where noise has tails
MEDIAN_SAMPLES = 5  # outlives glitches of two samples


@dataclass(frozen=True, slots=True, eq=False)
class Samples:
    """time_s strictly increasing; load_n net; index as the device numbered; unusable: samples left out (NaN,
    order).
    """

    time_s: Floats
    load_n: Floats
    index: npt.NDArray[np.int64]
    period_s: float
    unusable: int

    @property
    def count(self) -> int:
        return int(self.time_s.size)


@dataclass(frozen=True, slots=True, eq=False)
class Along:
    """Displacement or strain beside each force sample; NaN where there is none. aligned: taken from another
    clock.
    """

    role: str
    values: Floats
    aligned: bool


def samples_of(channel: ChannelData, tare_n: float) -> Samples:
    """Finite samples in time order, tare taken off. time_s is counted from the opening of the run."""
    usable = np.isfinite(channel.time_s) & np.isfinite(channel.value)
    time_s, load_n, index = channel.time_s[usable], channel.value[usable] - tare_n, channel.index[usable]
    if time_s.size > 1:
        rising = np.concatenate(([True], time_s[1:] > np.maximum.accumulate(time_s)[:-1]))
        time_s, load_n, index = time_s[rising], load_n[rising], index[rising]
    period_s = float(np.median(np.diff(time_s))) if time_s.size > 1 else float("nan")
    return Samples(time_s, load_n, index, period_s, int(channel.value.size - time_s.size))


def along_of(run: RunData, role: str, force: ChannelData, samples: Samples) -> Along | None:
    """The first channel of that role beside the force samples; None where there is no such channel."""
    channel = run.by_role(role)
    if channel is None:
        return None
    same = channel.time_s.size == force.time_s.size and bool(np.array_equal(channel.time_s, force.time_s))
    usable = np.isfinite(channel.time_s) & np.isfinite(channel.value)
    time_s, value = channel.time_s[usable], channel.value[usable]
    if time_s.size < 2:
        return None
    order = np.argsort(time_s, kind="stable")
    time_s, value = time_s[order], value[order]
    values = np.interp(samples.time_s, time_s, value, left=np.nan, right=np.nan)
    values[_far_from(samples.time_s, time_s)] = np.nan
    return Along(role, values, aligned=not same)


def _far_from(time_s: Floats, known_s: Floats) -> npt.NDArray[np.bool_]:
    """Times inside a hole of the other channel: further than 3 of its periods between its neighbours."""
    period_s = float(np.median(np.diff(known_s)))
    after = np.clip(np.searchsorted(known_s, time_s), 1, known_s.size - 1)
    inside = (time_s != known_s[after]) & (time_s != known_s[after - 1])
    wide: npt.NDArray[np.bool_] = inside & (known_s[after] - known_s[after - 1] > 3.0 * period_s)
    return wide


def running_median(load_n: Floats, width: int = MEDIAN_SAMPLES) -> Floats:
    """Median of each sample and its neighbours; the ends repeat their nearest whole window."""
    if load_n.size < width:
        return np.full(load_n.size, float(np.median(load_n))) if load_n.size else load_n
    middle = np.median(np.lib.stride_tricks.sliding_window_view(load_n, width), axis=1)
    half = width // 2
    return np.concatenate((load_n[:half], middle, load_n[load_n.size - half :]))


def screened(load_n: Floats, sigma_n: float) -> npt.NDArray[np.bool_]:
    """Samples that agree with their neighbours: within max(6 sigma, 2 %) of their running median."""
    median_n = running_median(load_n)
    allowed_n = np.maximum(SCREEN_SIGMAS * sigma_n, SCREEN_SHARE * np.abs(median_n))
    agreeing: npt.NDArray[np.bool_] = np.abs(load_n - median_n) <= allowed_n
    return agreeing


def noise_guess_n(load_n: Floats) -> float:
    """Last resort where no tare note and no card tells the noise: spread about the running median.

    A median of 5 takes about a third of white noise with it; hum it does not see at all.
    """
    if load_n.size < MEDIAN_SAMPLES:
        return 0.0
    return 1.2 * robust_spread(load_n - running_median(load_n))
