"""Tare: a zero taken at rest over whole mains periods, with noise, drift and uncertainty, or refused.

A second is 50 periods of 50 Hz and 60 of 60 Hz, and each of its ten blocks is 5
and 6: hum leaves the block means, aliased or not, and their median survives a knock. Nothing is ever
subtracted from the recorded force: limits go on seeing gross.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import ceil, log, sqrt

import numpy as np

from daq.stream.block import Floats

BLOCKS = 10
SECONDS_MIN = 1.0
SECONDS_MORE = (
    4.0  # a drift that one second cannot tell from noise is looked at for longer before it is refused
)
SAMPLES_MIN = 32
NOISE_TIMES = 3.0
DRIFT_SHARE_PER_MIN = 0.001
DRIFT_SIGMA = 3.5
UNSURE_SIGMA = 6.0
WINDOW_SHARE = 0.01
CAUTION_SHARE = 0.002
FROZEN_PROBABILITY = 1e-6
MAD_TO_SIGMA = 1.4826


@dataclass(frozen=True, slots=True)
class TareNote:
    """A zero, as taken. frozen_samples: identical values in a row that this signal will not show by chance."""

    tare_n: float
    sigma_n: float
    drift_n_min: float
    u_n: float
    samples: int
    rate_hz: float
    step_n: float
    low_n: float
    high_n: float
    dull: bool
    frozen_samples: int


@dataclass(frozen=True, slots=True)
class TareRules:
    """What a zero must keep to. quiet_n None: no quiet record, noise cannot be judged."""

    capacity_n: float
    zero_n: float
    quiet_n: float | None
    step_n: float
    previous_n: float | None
    run_s: float


class Collector:
    """Samples at rest until there are enough for a zero."""

    __slots__ = ("at_mm", "gross_n", "seconds", "seconds_max", "seconds_min", "times_s", "told")

    def __init__(self, rate_hz: float) -> None:
        self.seconds_min = self.seconds = tare_seconds(rate_hz)
        self.seconds_max = self.seconds_min + SECONDS_MORE
        self.times_s: list[float] = []
        self.gross_n: list[float] = []
        self.at_mm: float | None = None
        self.told: tuple[str, ...] = ()

    def begin_again(self) -> None:
        self.times_s.clear()
        self.gross_n.clear()
        self.at_mm = None
        self.seconds = self.seconds_min

    def look_longer(self) -> bool:
        """One more second, if there is one left."""
        self.seconds += 1.0
        return self.seconds <= self.seconds_max

    @property
    def full(self) -> bool:
        return bool(self.times_s) and self.times_s[-1] - self.times_s[0] >= self.seconds

    def cut(self) -> tuple[Floats, Floats]:
        """Exactly the whole seconds; what came after is left out."""
        times, gross = np.array(self.times_s), np.array(self.gross_n)
        inside = times < times[0] + self.seconds - 1e-9
        return times[inside], gross[inside]


def tare_seconds(rate_hz: float) -> float:
    """Whole seconds, and enough samples to see the noise."""
    return max(SECONDS_MIN, float(ceil(SAMPLES_MIN / rate_hz)))


@dataclass(frozen=True, slots=True)
class Taken:
    """reasons: against it. final: no override helps (a dead signal). drifting: the drift may be noise still."""

    note: TareNote
    reasons: tuple[str, ...] = ()
    final: bool = False
    drifting: bool = False


def take(times_s: Floats, gross_n: Floats, rules: TareRules) -> Taken:
    """A zero from samples at rest, and what stands against it."""
    if not bool(np.isfinite(gross_n).all()):
        return Taken(_empty(len(gross_n)), ("the force is not a number",), final=True)
    note = _note(times_s, gross_n, rules)
    if note.low_n == note.high_n and not _may_be_constant(rules):
        why = "the force does not move by a single count: frozen, or too coarse to be judged"
        return Taken(note, (why,), final=True)
    allowed = DRIFT_SHARE_PER_MIN * rules.capacity_n
    beyond = abs(note.drift_n_min) - allowed
    drifting = 0.0 < beyond <= UNSURE_SIGMA * _white_error_n_min(times_s, note)
    return Taken(note, tuple(_refusals(note, gross_n, times_s, rules)), drifting=drifting)


def _note(times_s: Floats, gross_n: Floats, rules: TareRules) -> TareNote:
    centres_s, means_n = _blocks(times_s, gross_n)
    slope, _ = _slope(centres_s, means_n)
    line = means_n.mean() + slope * (centres_s - centres_s.mean())
    sigma_blocks = float(np.sqrt(np.sum((means_n - line) ** 2) / max(1, len(means_n) - 2)))
    around = gross_n - (means_n.mean() + slope * (times_s - centres_s.mean()))
    step_n = max(rules.step_n, _step(gross_n))
    floor = max(step_n / sqrt(12.0), rules.quiet_n or 0.0)
    sigma = max(MAD_TO_SIGMA * float(np.median(np.abs(around - np.median(around)))), floor)
    drift_u = slope * rules.run_s / 2.0
    longest, repeats = _repeats(gross_n)
    return TareNote(
        tare_n=float(np.median(means_n)),
        sigma_n=sigma,
        drift_n_min=slope * 60.0,
        u_n=sqrt(sigma_blocks**2 / len(means_n) + drift_u**2),
        samples=len(gross_n),
        rate_hz=(len(times_s) - 1) / float(times_s[-1] - times_s[0]),
        step_n=step_n,
        low_n=float(gross_n.min()),
        high_n=float(gross_n.max()),
        dull=repeats > 0.5,
        frozen_samples=_frozen_samples(longest, repeats),
    )


def _refusals(note: TareNote, gross_n: Floats, times_s: Floats, rules: TareRules) -> list[str]:
    found = []
    sigma = _white_sigma(times_s, gross_n, note)
    if rules.quiet_n is not None and not sigma <= NOISE_TIMES * max(rules.quiet_n, note.step_n):
        found.append(f"noise {sigma:.3g} N, quiet record {rules.quiet_n:.3g} N")
    drift_max = max(
        DRIFT_SHARE_PER_MIN * rules.capacity_n, DRIFT_SIGMA * _drift_error_n_min(times_s, gross_n, note)
    )
    if not abs(note.drift_n_min) <= drift_max:
        found.append(f"drift {note.drift_n_min:.3g} N/min, allowed {drift_max:.3g} N/min")
    off = note.tare_n - rules.zero_n
    if not abs(off) <= WINDOW_SHARE * rules.capacity_n:
        found.append(f"gross force {note.tare_n:.4g} N: load on the fixture, or the zero has moved")
    if (
        rules.previous_n is not None
        and not abs(note.tare_n - rules.previous_n) <= WINDOW_SHARE * rules.capacity_n
    ):
        found.append(f"zero moved by {note.tare_n - rules.previous_n:.3g} N since the last one")
    return found


def _white_sigma(times_s: Floats, gross_n: Floats, note: TareNote) -> float:
    """Noise without hum, which block means leave out; those of a filtered stream overstate it: the lesser."""
    centres_s, means_n = _blocks(times_s, gross_n)
    slope, _ = _slope(centres_s, means_n)
    rest = means_n - means_n.mean() - slope * (centres_s - centres_s.mean())
    of_means = sqrt(float(np.sum(rest**2)) / max(1, len(means_n) - 2))
    return min(note.sigma_n, of_means * sqrt(len(gross_n) / len(means_n)))


def _drift_error_n_min(times_s: Floats, gross_n: Floats, note: TareNote) -> float:
    """Standard error of the drift: from the blocks' scatter, and not below what the samples' noise gives."""
    _, of_blocks = _slope(*_blocks(times_s, gross_n))
    return max(60.0 * of_blocks, _white_error_n_min(times_s, note))


def _white_error_n_min(times_s: Floats, note: TareNote) -> float:
    return 60.0 * note.sigma_n * sqrt(12.0 / len(times_s)) / float(times_s[-1] - times_s[0])


def _blocks(times_s: Floats, gross_n: Floats) -> tuple[Floats, Floats]:
    """Ten blocks of equal time."""
    span_s = (times_s[-1] - times_s[0]) * len(times_s) / max(1, len(times_s) - 1)
    place = np.minimum(((times_s - times_s[0]) / span_s * BLOCKS + 1e-9).astype(np.int64), BLOCKS - 1)
    counts = np.bincount(place, minlength=BLOCKS)
    used = counts > 0
    means = np.bincount(place, gross_n, BLOCKS)[used] / counts[used]
    centres = np.bincount(place, times_s - times_s[0], BLOCKS)[used] / counts[used]
    return centres + times_s[0], means


def _slope(times_s: Floats, values: Floats) -> tuple[float, float]:
    """Slope and its standard error."""
    off_s = times_s - times_s.mean()
    spread = float(np.sum(off_s**2))
    slope = float(np.sum(off_s * values)) / spread
    rest = values - values.mean() - slope * off_s
    error = sqrt(float(np.sum(rest**2)) / max(1, len(values) - 2) / spread)
    return slope, error


def _step(values: Floats) -> float:
    """The smallest change seen: the resolution as it is, whatever the card says."""
    steps = np.abs(np.diff(values))
    steps = steps[steps > 0]
    return float(steps.min()) if steps.size else 0.0


def _repeats(values: Floats) -> tuple[int, float]:
    """Longest row of identical values, and the share of samples equal to the one before."""
    changes = np.flatnonzero(np.diff(values) != 0)
    edges = np.concatenate(([-1], changes, [len(values) - 1]))
    share = 1.0 - len(changes) / max(1, len(values) - 1)
    return int(np.diff(edges).max()), share


def _frozen_samples(longest: int, repeats: float) -> int:
    """Rows this long come by chance less than once in a million; three times the longest seen in any case."""
    likely = (repeats * 100.0 + 3.0) / 103.0
    by_chance = ceil(log(FROZEN_PROBABILITY) / log(min(likely, 0.999)))
    return max(5, by_chance, 3 * longest)


def _may_be_constant(rules: TareRules) -> bool:
    """A quiet record far below one count says that this signal stands still at rest."""
    return rules.quiet_n is not None and rules.step_n > 0 and rules.quiet_n < 0.3 * rules.step_n


def _empty(samples: int) -> TareNote:
    nan = float("nan")
    return TareNote(nan, nan, nan, nan, samples, nan, nan, nan, nan, False, 0)
