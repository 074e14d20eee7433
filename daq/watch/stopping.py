"""StopCheck: a stop is not believed until the crosshead stands. Repeats at 10 Hz, says when it failed.

Rows 26 and 12 of the limits: displacement still changing 0.3 s after the stop (or half again the
measured stop latency), a run-on of ten times what was expected, or a force that still rises, is a failed
stop.

Standing is slower than a fifth of the set speed, and has to be shown. A position that moves in steps too coarse to
show that at once is watched for longer; the machine's own word and, in contact, the force may show it sooner. What
none of them has shown in three seconds is said to be not seen, never to stand.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum

from daq.watch.travel import Travel

REPEAT_S = 0.1
FAIL_S = 0.3
FAIL_LATENCIES = 1.5
WINDOW_S, WINDOW_S_MAX = 0.1, 0.35
STANDING_SHARE = 0.2
RESOLUTIONS = 4.0
SLOPE_RESOLUTIONS = 1.5  # the slope over a window is known to so many steps of the position
BAND_RESOLUTIONS, SHOWN_RESOLUTIONS = (
    1.5,
    2.5,
)  # stays within the one; at the allowed speed it would go the other
RUN_ON_TIMES = 10.0
SPEED_MM_S_MIN = 0.5 / 60.0
STILL_MM_S = 1e-4  # 6 um/min: slower than any load train relaxes
SEEN_S_MAX = 3.0
FORCE_SIGMAS = 4.0
BLIND_S = 1.0
FORCE_LOOK_S = 0.1
RUN_ON = "run-on of ten times the expected"


class Outcome(Enum):
    STANDS = "stands"
    BLIND = "nothing to see it by"
    FAILED = "failed"


@dataclass(frozen=True, slots=True)
class Look:
    """What one look at the stopping machine said. repeat: send the stop once more. why: what has shown that it stands,
    why that cannot be seen, or why the stop has failed.
    """

    repeat: bool
    outcome: Outcome | None
    why: str = ""
    row: int = 26


@dataclass(frozen=True, slots=True)
class Force:
    """What the force says of the crosshead. rise_n: a rise that cannot be noise; sigma_n: of force_n itself;
    stiffness_n_mm: at least so much force per way, 0 where nothing is touched for certain.
    """

    force_n: float
    rise_n: float
    sigma_n: float = 0.0
    stiffness_n_mm: float = 0.0


class Stay:
    """How long a value has stayed within a band around where it stood first."""

    __slots__ = ("_at", "_since_s")

    def __init__(self) -> None:
        self._at, self._since_s = float("nan"), 0.0

    def feed(self, now_s: float, value: float, band: float) -> bool:
        """False where it has left the band; it is then watched anew from here."""
        known = self._at == self._at
        if known and abs(value - self._at) <= band:
            return True
        self._at, self._since_s = value, now_s
        return not known

    def lasted_s(self, now_s: float) -> float:
        return now_s - self._since_s


class StopCheck:
    """One stop from its first command until the crosshead stands."""

    __slots__ = (
        "_force_age_s",
        "_force_s",
        "_force_stay",
        "_force_then",
        "_give_up_s",
        "_latency_s",
        "_position_stay",
        "_repeat_s",
        "_slow_mm_s",
        "_speed_mm_s",
        "_window_s",
        "attempt",
        "begun_s",
        "fail_s",
        "failed",
        "from_mm",
        "reason",
    )

    def __init__(
        self,
        reason: str,
        now_s: float,
        *,
        speed_mm_s: float,
        latency_s: float,
        travel: Travel | None,
        force_age_s: float = 0.0,
    ) -> None:
        self.reason, self.begun_s, self.attempt, self.failed = reason, now_s, 1, False
        self.from_mm = travel.at_mm if travel is not None else None
        self.fail_s = max(FAIL_S, FAIL_LATENCIES * latency_s)
        self._latency_s, self._repeat_s = latency_s, now_s + REPEAT_S
        self._speed_mm_s = max(abs(speed_mm_s), SPEED_MM_S_MIN)
        self._slow_mm_s = max(STANDING_SHARE * (abs(speed_mm_s) or SPEED_MM_S_MIN), STILL_MM_S)
        window_s = WINDOW_S
        if travel is not None:
            seen_s = SLOPE_RESOLUTIONS * travel.resolution_mm / self._slow_mm_s
            window_s = min(
                max(WINDOW_S, seen_s, 4.0 * travel.spacing_s), WINDOW_S_MAX + 4.0 * travel.spacing_s
            )
        self._window_s = window_s
        self._position_stay, self._force_stay = Stay(), Stay()
        self._give_up_s = now_s + SEEN_S_MAX
        # the force at hand is as old as its bin and its filter: one of before the standstill proves no rise after it
        self._force_age_s = force_age_s
        self._force_s, self._force_then = now_s + 1.2 * latency_s + force_age_s, float("nan")

    def look(self, now_s: float, travel: Travel | None, moving: bool | None, force: Force) -> Look:
        """moving: the machine's own word, None if it has none."""
        repeat = now_s >= self._repeat_s
        if repeat:
            self._repeat_s = now_s + REPEAT_S
            self.attempt += 1
        outcome, why = self._judge(now_s, travel, moving, force)
        if outcome is Outcome.FAILED:
            self._give_up_s = now_s + SEEN_S_MAX
            if self.failed:
                outcome = None
            self.failed = True
        again = repeat and outcome not in (Outcome.STANDS, Outcome.BLIND)
        return Look(again, outcome, why, 12 if why == RUN_ON else 26)

    def run_on_mm(self, travel: Travel | None) -> float | None:
        if travel is None or travel.at_mm is None or self.from_mm is None:
            return None
        return travel.at_mm - self.from_mm

    def _judge(
        self, now_s: float, travel: Travel | None, moving: bool | None, force: Force
    ) -> tuple[Outcome | None, str]:
        after_s = now_s - self.begun_s
        if self._rises(now_s, force.force_n, force.rise_n):
            return Outcome.FAILED, "the force still rises"
        run_on = self.run_on_mm(travel)
        if travel is None or run_on is None or now_s - travel.time_s > self.fail_s:
            return self._blind(after_s, moving)
        expected_mm = self._speed_mm_s * self._latency_s
        if abs(run_on) > max(RUN_ON_TIMES * expected_mm, RESOLUTIONS * travel.resolution_mm):
            return Outcome.FAILED, RUN_ON
        speed = travel.speed_mm_s(self._window_s)
        if speed is None or after_s < min(self._window_s, self._latency_s):
            return None, ""
        shown = SLOPE_RESOLUTIONS * travel.resolution_mm / self._window_s
        slow = max(self._slow_mm_s, shown)
        if abs(speed) < slow and moving is not True:
            if shown <= self._slow_mm_s * 1.001:
                return Outcome.STANDS, "position"
            return self._coarse(now_s, travel, moving, force)
        if after_s >= max(self.fail_s, self._latency_s + self._window_s):
            return Outcome.FAILED, "the position still changes" if abs(speed) >= slow else "it says it moves"
        return None, ""

    def _coarse(
        self, now_s: float, travel: Travel, moving: bool | None, force: Force
    ) -> tuple[Outcome | None, str]:
        """Too slow for a short window of this position channel: watch it for longer, ask the other witnesses."""
        after_s = now_s - self.begun_s
        if after_s < self._latency_s:
            return None, ""
        if moving is False:
            return Outcome.STANDS, "the machine's own word"
        stays = self._position_stay.feed(
            now_s, travel.mean_mm(WINDOW_S), BAND_RESOLUTIONS * travel.resolution_mm
        )
        if not stays and after_s >= self.fail_s + WINDOW_S:
            return Outcome.FAILED, "the position still changes"
        if self._position_stay.lasted_s(now_s) >= SHOWN_RESOLUTIONS * travel.resolution_mm / self._slow_mm_s:
            return Outcome.STANDS, "position"
        if self._force_stays(now_s, force):
            return Outcome.STANDS, "force"
        if now_s >= self._give_up_s:
            return Outcome.BLIND, "slower than the position channel can show"
        return None, ""

    def _force_stays(self, now_s: float, force: Force) -> bool:
        """In contact a crosshead at the allowed speed would have moved the force out of twice its band by now."""
        if not force.stiffness_n_mm > 0 or now_s < self.begun_s + self._latency_s + self._force_age_s:
            return False
        band_n = FORCE_SIGMAS * force.sigma_n
        self._force_stay.feed(now_s, force.force_n, band_n)
        gain_n = force.stiffness_n_mm * self._slow_mm_s * self._force_stay.lasted_s(now_s)
        return gain_n > 0 and gain_n >= 2.0 * band_n

    def _rises(self, now_s: float, force_n: float, rise_n: float) -> bool:
        """Look after look: a force that has risen and now stays must not be said to rise for ever."""
        known = self._force_then == self._force_then
        if now_s < self._force_s:
            return self.failed and known
        look_s = FORCE_LOOK_S + self._force_age_s
        if not known:
            self._force_then, self._force_s = force_n, max(now_s + look_s, self.begun_s + self.fail_s)
        elif force_n - self._force_then > rise_n:
            self._force_then, self._force_s = force_n, now_s + look_s
            return True
        return False

    def _blind(self, after_s: float, moving: bool | None) -> tuple[Outcome | None, str]:
        if moving is False and after_s >= self._latency_s:
            return Outcome.STANDS, "the machine's own word"
        if moving is True and after_s >= self.fail_s:
            return Outcome.FAILED, "it says it moves"
        return (Outcome.BLIND, "no position is known") if after_s >= BLIND_S else (None, "")
