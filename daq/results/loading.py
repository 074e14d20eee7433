"""Loading: the samples of one run between contact and break, with what is known about them. No result yet."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from daq.results.fits import fit_curve
from daq.results.peak import Onset
from daq.results.samples import Samples, noise_guess_n, running_median, screened
from daq.results.setup import Setup
from daq.results.story import GRADUAL, Story

CONTACT_SHARE = 0.001  # of the peak, and at least 3 sigma: the load history begins here
CONTACT_SIGMAS = 3.0
SEATED_SHARE = 0.05  # of the peak: taken as seated where no event says it
FALL_SHARES = (0.9, 0.2)  # of the peak: where the fall is looked at for the filter's lag
FALL_SAMPLES = 3
FALL_MISFIT_MAX = 0.1  # of ln(load): the fall must look like one exponential


@dataclass(frozen=True, slots=True, eq=False)
class Loading:
    """clean: screened samples; onset: None without a fracture; highest_n: of the clean samples before the
    break.

    contact_s, seated_s: where the load history and the straight part of it begin; NaN without samples.
    """

    setup: Setup
    story: Story
    samples: Samples
    clean: npt.NDArray[np.bool_]
    sigma_n: float
    onset: Onset | None
    highest_n: float
    contact_s: float
    seated_s: float

    @property
    def gradual(self) -> bool:
        return self.story.fracture is not None and self.story.fracture.verdict == GRADUAL

    @property
    def end_s(self) -> float:
        """The last time at which the bar certainly carried its load."""
        return _end_s(self.samples, self.onset)

    @property
    def inside(self) -> npt.NDArray[np.bool_]:
        """Clean samples from contact to the break."""
        before: npt.NDArray[np.bool_] = self.clean & (self.samples.time_s <= self.end_s)
        return before & (self.samples.time_s >= self.contact_s)

    def net_n(self, gross_n: float | None) -> float | None:
        """Tare taken off a load of an event."""
        return None if gross_n is None else gross_n - self.story.tare_n


def loading_of(setup: Setup, story: Story, samples: Samples) -> Loading:
    """Find the break, the noise, and where the loading began."""
    onset = _onset(story, samples)
    sigma_n = _sigma_n(setup, story, samples, onset)
    clean = screened(samples.load_n, sigma_n)
    end_s = _end_s(samples, onset)
    before = clean & (samples.time_s <= end_s)
    highest_n = float(np.max(running_median(samples.load_n[before]), initial=0.0))
    seated_s = story.seated_s
    if seated_s is None:
        seated_s = _last_below_s(samples, SEATED_SHARE * highest_n, end_s)
    contact_s = _last_below_s(samples, max(CONTACT_SHARE * highest_n, CONTACT_SIGMAS * sigma_n), end_s)
    return Loading(setup, story, samples, clean, sigma_n, onset, highest_n, contact_s, seated_s)


def _end_s(samples: Samples, onset: Onset | None) -> float:
    if onset is not None:
        return onset.last_good_s
    return float(samples.time_s[-1]) if samples.count else math.nan


def _onset(story: Story, samples: Samples) -> Onset | None:
    """The two samples between which the load fell: by the device's number, else by time. None: no
    fracture.
    """
    seen = story.fracture
    if seen is None or samples.count < 2:
        return None
    last = -1
    if seen.last_good_index is not None:
        found = np.flatnonzero(samples.index == seen.last_good_index)
        last = int(found[-1]) if found.size else -1
    if last < 0 and seen.last_good_s is not None:
        last = int(np.searchsorted(samples.time_s, seen.last_good_s + 1e-9, side="right")) - 1
    elif last < 0 and seen.first_dropped_s is not None:
        last = int(np.searchsorted(samples.time_s, seen.first_dropped_s - 1e-9, side="left")) - 1
    if not 0 <= last < samples.count - 1:
        return None
    return Onset(float(samples.time_s[last]), float(samples.time_s[last + 1]))


def _sigma_n(setup: Setup, story: Story, samples: Samples, onset: Onset | None) -> float:
    """Force noise: at the break, else from the tare note, else the quiet record; a guess without all
    three.
    """
    told = (
        None if story.fracture is None else story.fracture.sigma_n,
        None if story.tare is None else story.tare.sigma_n,
        None if setup.frame is None else setup.frame.cell.noise_quiet_n,
    )
    for sigma_n in told:
        if sigma_n is not None and sigma_n >= 0.0:
            return sigma_n
    return noise_guess_n(samples.load_n[samples.time_s <= _end_s(samples, onset)])


def _last_below_s(samples: Samples, level_n: float, end_s: float) -> float:
    """Time of the last sample below a level before end_s; the first sample's where there is none."""
    if samples.count == 0:
        return math.nan
    below = np.flatnonzero((running_median(samples.load_n) < level_n) & (samples.time_s <= end_s))
    return float(samples.time_s[int(below[-1]) if below.size else 0])


def fall_time_constant_s(loading: Loading) -> float | None:
    """Time constant of the fall after a sudden break, where it looks like one exponential."""
    if loading.onset is None or loading.gradual:
        return None
    after = loading.samples.time_s >= loading.onset.first_dropped_s
    time_s, load_n = loading.samples.time_s[after], loading.samples.load_n[after]
    high_n, low_n = (share * loading.highest_n for share in FALL_SHARES)
    past = np.flatnonzero(load_n < low_n)
    falling = np.flatnonzero(load_n[: int(past[0]) if past.size else 0] <= high_n)
    if falling.size < FALL_SAMPLES or not low_n > 0:
        return None
    t, log_n = time_s[falling], np.log(load_n[falling])
    line = fit_curve(t, log_n, 2)
    misfit = float(np.max(np.abs(log_n - (line.value + line.slope * (t - line.origin)))))
    return -1.0 / line.slope if line.slope < 0 and misfit < FALL_MISFIT_MAX else None
