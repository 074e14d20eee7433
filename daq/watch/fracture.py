"""The fracture watch: what kind of event a fall (or a kink) of the force is. Judged in time, not in samples.

Every sample that lies further from the forecast than the threshold opens a *candidate*; while one is open,
forecast, noise and envelope stand still. A candidate ends as sudden break, gradual failure, lasting drop,
partial drop, glitch, silent re-baseline, or signal lost. The scalar `feed` is the definition;
`quiet`/`take` prove for a whole stretch that nothing happens in it and give the very same state after. It
knows force only: whether the crosshead went back, and so took the load off, is asked by the pipeline before
it believes anything found here.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum

from daq.cards.method import FractureSettings
from daq.stream.block import Floats
from daq.watch.candidate import Candidate, Rest
from daq.watch.noise import Level

INFINITE = float("inf")
CONFIRM_SAMPLES = 3
UNDECIDED_S, UNDECIDED_SAMPLES, UNDECIDED_LAGS = 0.05, 5, 6.0
FALLING_PATIENCE = 4.0  # a fall that goes on may take this many undecided times before it is called
LOW_SHARE = 0.6
PARTIAL_SIGMA, PARTIAL_SHARE = 6.0, 0.01
SAG_SHARE, SAG_SIGMA, SAG_S, SAG_RATE_SHARE = 0.95, 3.0, 0.5, 0.1
BACKSTOP_SAMPLES, BACKSTOP_CONFIRMS = 3, 2.0
SUDDEN_S, SUDDEN_PERIODS, SUDDEN_LAGS = 0.02, 3.5, 3.0
TWIN_S = 0.5  # partial drops closer than this count together towards the lasting drop


class Kind(Enum):
    SUDDEN = "sudden break"
    GRADUAL = "gradual failure"
    LASTING = "lasting drop"
    PARTIAL = "partial drop"
    GLITCH = "glitch"
    REBASELINE = "re-baseline"
    LOST = "signal lost"


ENDS_RUN = frozenset({Kind.SUDDEN, Kind.GRADUAL, Kind.LASTING})
ENDS_WATCH = ENDS_RUN | {Kind.LOST}


@dataclass(frozen=True, slots=True)
class Finding:
    """One decided candidate. Forces as fed (net). by: the rule that decided."""

    kind: Kind
    by: str
    time_s: float
    onset_s: float
    last_good_s: float
    last_good_index: int
    first_dropped_s: float
    peak_raw: float
    forecast: float  # at the onset
    slope_n_s: float
    level: float  # mean of the last confirm window
    drop: float
    sigma_n: float
    fall_s: float
    samples: int


class FractureWatch:
    """Fed every finite force sample of the armed frame (net), one by one or in proven-quiet stretches."""

    __slots__ = (
        "_armed_n",
        "_armed_s",
        "_bound",
        "_confirm_s",
        "_envelope_s",
        "_good_index",
        "_good_s",
        "_half",
        "_last_partial",
        "_low_count",
        "_low_since_s",
        "_sag_level",
        "_sag_since_s",
        "_undecided_s",
        "arm_n",
        "armed",
        "candidate",
        "envelope",
        "gradual",
        "highest",
        "level",
        "peak_raw",
        "rest",
        "settings",
        "sudden_s",
        "watching",
    )

    def __init__(self, rate_hz: float, sigma_rest_n: float, settings: FractureSettings, lag_s: float) -> None:
        self.level = Level(rate_hz, sigma_rest_n)
        self.level.threshold_sigma = settings.threshold_sigma
        self.level.threshold_share = settings.threshold_percent / 100.0
        self.settings, self.rest = settings, Rest()
        period_s = self.level.period_s
        self._confirm_s = max(settings.confirm_s, CONFIRM_SAMPLES * period_s, 3.0 * lag_s)
        self._undecided_s = max(UNDECIDED_S, UNDECIDED_SAMPLES * period_s, UNDECIDED_LAGS * lag_s)
        self.sudden_s = max(SUDDEN_S, SUDDEN_PERIODS * period_s) + SUDDEN_LAGS * lag_s
        self._good_s, self._good_index = 0.0, -1
        self.watching = self.gradual = False
        self._clear(INFINITE)

    def watch(self, on: bool, *, arm_n: float = INFINITE, gradual: bool = False) -> None:
        """Begin or end watching. gradual: the slow-failure rule is on (loading, not holding)."""
        self.gradual = gradual
        if on and self.watching:
            return
        self.watching = on
        self._clear(arm_n)
        if on:
            self._bound = self.level.limit_n
            self._arm()

    def _clear(self, arm_n: float) -> None:
        self.armed, self.arm_n = False, arm_n
        self.candidate: Candidate | None = None
        self._bound, self._half = INFINITE, -INFINITE
        self.envelope = self.highest = self.peak_raw = -INFINITE
        self._envelope_s = self._armed_s = self._armed_n = 0.0
        self._low_count, self._low_since_s = 0, 0.0
        self._sag_since_s: float | None = None
        self._sag_level = 0.0
        self._last_partial: tuple[float, float] | None = None

    # --- the scalar definition

    def feed(self, index: int, time_s: float, value: float) -> Finding | None:
        """One sample. Returns what was decided by it, if anything was."""
        level = self.level
        residual = value - (level.at_n + level.slope_n_s * (time_s - level.origin_s))
        bound = self._bound
        if self.candidate is None and -bound <= residual <= bound and value >= self._half:
            self._low_count = 0
            self._good_s, self._good_index = time_s, index
            if value > self.peak_raw:
                self.peak_raw = value
            return self._bin_closed(time_s) if level.add(time_s, value, residual) else None
        return self._unusual(index, time_s, value, residual)

    # --- the vectorised proof

    def quiet(self, times_s: Floats, values: Floats) -> Floats | None:
        """The residuals, if the scalar path would accept every sample of this stretch; else None."""
        if self.candidate is not None:
            return None
        level = self.level
        residuals = values - (level.at_n + level.slope_n_s * (times_s - level.origin_s))
        if not (
            -self._bound <= float(residuals.min())
            and float(residuals.max()) <= self._bound
            and float(values.min()) >= self._half
        ):
            return None
        return residuals

    def take(self, first_index: int, times_s: Floats, values: Floats, residuals: Floats) -> Finding | None:
        """Accept a stretch that `quiet` has proven; it must not reach beyond the bin (`level.room`)."""
        self._low_count = 0
        self._good_s, self._good_index = float(times_s[-1]), first_index + len(values) - 1
        self.peak_raw = max(self.peak_raw, float(values.max()))
        if self.level.add_many(times_s.tolist(), values.tolist(), residuals.tolist()):
            return self._bin_closed(self._good_s)
        return None

    # --- at the end of a bin

    def _bin_closed(self, time_s: float) -> Finding | None:
        if not self.watching:
            return None
        self._bound = self.level.limit_n
        if not self.armed:
            self._arm()
            return None
        newest, newest_s = self.level.newest_n, self.level.newest_s
        assert newest is not None and newest_s is not None
        if newest > self.envelope:
            self.envelope, self._envelope_s = newest, newest_s
        if newest > self.highest:
            self.highest = newest
            self._half = self.settings.break_percent / 100.0 * newest
        found = self._sag(time_s, newest) if self.gradual else None
        if found is not None:
            self._end()
        return found

    def _arm(self) -> None:
        """Armed where the forecast has risen above the arming level; stays so until the watch ends."""
        level = self.level
        newest, newest_s = level.newest_n, level.newest_s
        if newest is None or newest_s is None or not level.at_n > max(self.arm_n, 20.0 * level.sigma_n):
            return
        self.armed = True
        self.envelope = self.highest = self.peak_raw = newest
        self._half = self.settings.break_percent / 100.0 * newest
        self._armed_s = self._envelope_s = newest_s
        self._armed_n = newest

    def _sag(self, time_s: float, newest: float) -> Finding | None:
        """Gradual failure: below 95 % of the envelope for 0.5 s and not rising as it did before the peak."""
        if newest >= SAG_SHARE * self.envelope - SAG_SIGMA * self.level.sigma_n:
            self._sag_since_s = None
            return None
        if self._sag_since_s is None:
            self._sag_since_s, self._sag_level = time_s, newest
            return None
        lasted_s = time_s - self._sag_since_s
        if lasted_s < SAG_S:
            return None
        climbed_s = self._envelope_s - self._armed_s
        rate_before = (self.envelope - self._armed_n) / climbed_s if climbed_s > 0 else 0.0
        if (newest - self._sag_level) / lasted_s < SAG_RATE_SHARE * rate_before or rate_before <= 0:
            return self._slow(Kind.GRADUAL, "sag", time_s, newest)
        self._sag_since_s, self._sag_level = time_s, newest
        return None

    def _slow(self, kind: Kind, by: str, time_s: float, level_now: float) -> Finding:
        """A failure without an edge: its onset is the top of the envelope."""
        return Finding(
            kind=kind,
            by=by,
            time_s=time_s,
            onset_s=self._envelope_s,
            last_good_s=self._envelope_s,
            last_good_index=self._good_index - round((self._good_s - self._envelope_s) / self.level.period_s),
            first_dropped_s=self._envelope_s,
            peak_raw=self.peak_raw,
            forecast=self.envelope,
            slope_n_s=self.level.slope_n_s,
            level=level_now,
            drop=self.envelope - level_now,
            sigma_n=self.level.sigma_n,
            fall_s=time_s - self._envelope_s,
            samples=0,
        )

    # --- while something is going on

    def _unusual(self, index: int, time_s: float, value: float, residual: float) -> Finding | None:
        if self.candidate is None and not -self._bound <= residual <= self._bound:
            good, share = (self._good_s, self._good_index), self.settings.break_percent / 100.0
            window_s = self._confirm_s - 0.5 * self.level.period_s
            self.candidate = Candidate(self.level, self._bound, good, share, window_s)
        found = None
        if self.candidate is not None:
            found = self._examine(self.candidate, time_s, value)
        elif self.level.add(time_s, value, residual):
            found = self._bin_closed(time_s)
        if found is None or found.kind not in ENDS_WATCH:
            found = self._backstop(time_s, value) or found
        if found is not None and found.kind in ENDS_WATCH:
            self._end()
        return found

    def _end(self) -> None:
        """Decided for good: what comes now is another story, and the level begins with its first samples."""
        c = self.candidate
        if c is not None:
            self.level.begin_anew(c.times_s[c.head :], c.values[c.head :], 0.0)
        self.watch(False)

    def _backstop(self, time_s: float, value: float) -> Finding | None:
        """Below half of the highest level for long enough is a break, however slowly it came."""
        if not value < self._half:
            self._low_count = 0
            return None
        if self._low_count == 0:
            self._low_since_s = time_s
        self._low_count += 1
        lasted_s = time_s - self._low_since_s + 1.5 * self.level.period_s
        if self._low_count < BACKSTOP_SAMPLES or lasted_s < BACKSTOP_CONFIRMS * self._confirm_s:
            return None
        if self.candidate is None:
            return self._slow(Kind.GRADUAL, "backstop", time_s, value)
        if self._unlike_a_break(self.candidate):
            return None
        return self._broken(self.candidate, "backstop", time_s)

    def _examine(self, c: Candidate, time_s: float, value: float) -> Finding | None:
        c.add(time_s, value)
        period_s = self.level.period_s
        if len(c.values) >= CONFIRM_SAMPLES and c.times_s[0] <= time_s - self._confirm_s + 1.5 * period_s:
            low = c.lows[-1] and c.low >= LOW_SHARE * c.window and c.mean < c.low_n
            # one sample more than the window: aliased ringing can keep the newest one high for long (480 Hz at 100 S/s)
            away = c.times_s[0] <= time_s - self._confirm_s + 0.5 * period_s and c.stays_away()
            if self.armed and (low or away) and not self._unlike_a_break(c):
                return self._broken(c, "confirmed", time_s)
            if c.nears[-1] and 2 * c.near >= c.window:
                return self._glitch(c, time_s)
        if time_s - c.times_s[0] + 1.5 * period_s < self._undecided_s or time_s < c.decide_s:
            return None
        return self._undecided(c, time_s)

    def _unlike_a_break(self, c: Candidate) -> bool:
        return c.negative() or c.dull(self.rest, self.level.sigma_rest_n)

    def _undecided(self, c: Candidate, time_s: float) -> Finding | None:
        """Neither break nor glitch after the undecided time. Before the watch is armed that is all there is to
        decide: glitches are kept out of the level (one +400 N sample would arm it at 10 S/s), kinks are followed.
        """
        if not self.armed:
            found = self._decided(c, Kind.REBASELINE, "kink", time_s)
            self._rebaseline(c, restart_envelope=False)
            return found
        if c.dull(self.rest, self.level.sigma_rest_n):
            return self._decided(c, Kind.LOST, "constant", time_s)
        if (
            c.negative()
        ):  # a mirrored force is a wire; anything else below zero by now is for a person to look at
            if c.mirrored():
                return self._decided(c, Kind.LOST, "of the wrong sign", time_s)
            return self._decided(c, Kind.LASTING, "below zero", time_s)
        tail, reference = c.tail(), c.reference
        if self._last_partial is not None and time_s - self._last_partial[0] < TWIN_S:
            reference = max(reference, self._last_partial[1])
        if reference - c.mean > self.settings.lasting_percent / 100.0 * reference:
            waited_s = time_s - c.times_s[0]
            if tail.falling and waited_s < FALLING_PATIENCE * self._undecided_s:
                # on its way to the break; the sums are costly at 50 kS/s, so look again a little later
                c.decide_s = time_s + 0.1 * self._undecided_s
                return None
            return self._decided(c, Kind.LASTING, "lasting", time_s)
        drop_min = max(PARTIAL_SIGMA * c.sigma_n, PARTIAL_SHARE * self.envelope)
        if min(c.drop(), tail.step) > drop_min and not tail.falling:
            found = self._decided(c, Kind.PARTIAL, "partial", time_s)
            self._last_partial = (time_s, c.reference)
            self._rebaseline(c, restart_envelope=True)
            return found
        found = self._decided(c, Kind.REBASELINE, "falling" if tail.falling else "kink", time_s)
        self._rebaseline(c, restart_envelope=False)
        return found

    def _broken(self, c: Candidate, by: str, time_s: float) -> Finding:
        first = c.first_dropped()
        good_s = c.times_s[first - 1] if first else c.last_good_s
        sudden = c.first_low_s() - good_s <= self.sudden_s
        return self._decided(c, Kind.SUDDEN if sudden else Kind.GRADUAL, by, time_s)

    def _glitch(self, c: Candidate, time_s: float) -> Finding:
        found = self._decided(c, Kind.GLITCH, "back again", time_s)
        self.candidate = None
        index = c.last_good_index
        for t, x, off in zip(c.times_s, c.values, c.off(), strict=True):
            index += 1
            if -c.limit <= off <= c.limit:
                self._good_s, self._good_index = t, index
                self.peak_raw = max(self.peak_raw, x)
                if self.level.add(t, x, off):
                    self._bin_closed(t)
        return found

    def _rebaseline(self, c: Candidate, *, restart_envelope: bool) -> None:
        self.candidate = None
        times_s, values = c.tail_samples()
        self.level.begin_anew(times_s, values, None)
        self._bound = self.level.limit_n
        self._good_s, self._good_index = c.times_s[-1], c.last_good_index + len(c.values)
        newest, newest_s = self.level.newest_n, self.level.newest_s
        assert newest is not None and newest_s is not None
        if restart_envelope:
            self.envelope, self._envelope_s, self._sag_since_s = newest, newest_s, None
        else:
            self.peak_raw = max(self.peak_raw, *values)
        if not self.armed:
            self._arm()

    def _decided(self, c: Candidate, kind: Kind, by: str, time_s: float) -> Finding:
        first, off = c.first_dropped(), c.off()
        good_s = c.times_s[first - 1] if first else c.last_good_s
        onset_s = 0.5 * (good_s + c.times_s[first])
        return Finding(
            kind=kind,
            by=by,
            time_s=time_s,
            onset_s=onset_s,
            last_good_s=good_s,
            last_good_index=c.last_good_index + first,
            first_dropped_s=c.times_s[first],
            peak_raw=self.peak_raw,
            forecast=c.forecast(onset_s),
            slope_n_s=c.slope_n_s,
            level=c.mean,
            drop=max(off, key=abs) if kind is Kind.GLITCH else c.drop(),
            sigma_n=c.sigma_n,
            fall_s=c.first_low_s() - good_s,
            samples=sum(not -c.limit <= o <= c.limit for o in off),
        )
