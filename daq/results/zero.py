"""After-zero: does the cell come back to where it was tared? Both values are always kept.

The watch measures the shift; a run without its event is measured here from the tail. A corrected load is
offered, with the cause it assumes: drift grows with time, a tare under load is there from the start.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from daq.results.samples import Samples
from daq.results.story import Story

TAIL_S = 0.5
SETTLE_S = 0.1  # ring-down after the break
FLAG_SHARE = 0.002  # of the peak
FLAG_SIGMAS = 5.0  # of the mean
UNLOADED_SHARE = 0.05  # of the peak
CAUSE_SHARE = 0.5  # a cause must explain at least half of the shift


@dataclass(frozen=True, slots=True)
class AfterZero:
    """shift_n: reading of nothing after the break, net. correction_n is added to the load at the break."""

    shift_n: float
    measured_here: bool
    flagged: bool
    cause: str
    correction_n: float


def after_zero_of(
    story: Story, samples: Samples, *, peak_n: float, break_s: float, clean_n: float | None
) -> AfterZero | None:
    """None where nothing can be said: bar not broken, still loaded, or no tail. clean_n: unloaded gross
    reading.
    """
    if story.shift_n is not None:
        shift_n, here, flagged = story.shift_n, False, story.shift_flagged
    elif story.broken and story.unloaded is not False:
        measured = _tail_mean(samples, break_s, peak_n)
        if measured is None:
            return None
        shift_n, u_mean_n = measured
        here, flagged = True, abs(shift_n) > max(FLAG_SIGMAS * u_mean_n, FLAG_SHARE * abs(peak_n))
    else:
        return None
    cause, share = _cause(story, shift_n, samples, break_s, clean_n)
    return AfterZero(shift_n, here, flagged, cause, -shift_n * share)


def _tail_mean(samples: Samples, break_s: float, peak_n: float) -> tuple[float, float] | None:
    """Mean of the last 0.5 s after the ring-down and its standard error; None where the bar still carries
    load.
    """
    if samples.count == 0:
        return None
    from_s = max(break_s + SETTLE_S, float(samples.time_s[-1]) - TAIL_S)
    tail_n = samples.load_n[samples.time_s >= from_s]
    if tail_n.size < 3:
        return None
    mean_n = float(np.mean(tail_n))
    if not mean_n < UNLOADED_SHARE * abs(peak_n):  # a bar cannot pull: below zero nothing is on it
        return None
    return mean_n, float(np.std(tail_n, ddof=1)) / math.sqrt(tail_n.size)


def _cause(
    story: Story, shift_n: float, samples: Samples, break_s: float, clean_n: float | None
) -> tuple[str, float]:
    """What the shift is put down to, and the share of it that was there at the break."""
    tare = story.tare
    if tare is None or shift_n == 0.0:
        return "not known", 1.0
    end_s = float(samples.time_s[-1]) if samples.count else break_s
    lasted_s = end_s - tare.time_s
    drift_n = (tare.drift_n_min or 0.0) * lasted_s / 60.0
    if abs(shift_n - drift_n) < CAUSE_SHARE * abs(shift_n) and lasted_s > 0:
        return "drift", min(max((break_s - tare.time_s) / lasted_s, 0.0), 1.0)
    step_n = None if clean_n is None else tare.tare_n - clean_n
    if tare.overridden or (step_n is not None and abs(shift_n + step_n) < CAUSE_SHARE * abs(shift_n)):
        return "tare under load", 1.0
    return "not known", 1.0
