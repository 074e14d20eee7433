"""StopCheck: a stop is not believed until the crosshead stands. Repeats at 10 Hz, says when it failed.

Row 26 and row 12 of job map section 4: displacement still changing 0.3 s after the stop (or half again the
measured stop latency), a run-on of ten times what was expected, or a force that still rises, is a failed
stop.
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
RUN_ON_TIMES = 10.0
SPEED_MM_S_MIN = 0.5 / 60.0
BLIND_S = 1.0
FORCE_LOOK_S = 0.1
RUN_ON = "run-on of ten times the expected"


class Outcome(Enum):
    STANDS = "stands"
    BLIND = "nothing to see it by"
    FAILED = "failed"


@dataclass(frozen=True, slots=True)
class Look:
    """What one look at the stopping machine said. repeat: send the stop once more."""

    repeat: bool
    outcome: Outcome | None
    why: str = ""
    row: int = 26


class StopCheck:
    """One stop from its first command until the crosshead stands."""

    __slots__ = (
        "_force_age_s",
        "_force_s",
        "_force_then",
        "_latency_s",
        "_repeat_s",
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
        window_s = WINDOW_S
        if travel is not None:
            seen_s = RESOLUTIONS * travel.resolution_mm / self._speed_mm_s
            window_s = min(
                max(WINDOW_S, seen_s, 4.0 * travel.spacing_s), WINDOW_S_MAX + 4.0 * travel.spacing_s
            )
        self._window_s = window_s
        # the force at hand is as old as its bin and its filter: one of before the standstill proves no rise after it
        self._force_age_s = force_age_s
        self._force_s, self._force_then = now_s + 1.2 * latency_s + force_age_s, float("nan")

    def look(
        self, now_s: float, travel: Travel | None, moving: bool | None, force_n: float, rise_n: float
    ) -> Look:
        """moving: the machine's own word, None if it has none. rise_n: a rise that cannot be noise."""
        repeat = now_s >= self._repeat_s
        if repeat:
            self._repeat_s = now_s + REPEAT_S
            self.attempt += 1
        outcome, why = self._judge(now_s, travel, moving, force_n, rise_n)
        if outcome is Outcome.FAILED:
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
        self, now_s: float, travel: Travel | None, moving: bool | None, force_n: float, rise_n: float
    ) -> tuple[Outcome | None, str]:
        after_s = now_s - self.begun_s
        if self._rises(now_s, force_n, rise_n):
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
        slow = max(STANDING_SHARE * self._speed_mm_s, 1.5 * travel.resolution_mm / self._window_s)
        if abs(speed) < slow and moving is not True:
            return Outcome.STANDS, ""
        if after_s >= max(self.fail_s, self._latency_s + self._window_s):
            return Outcome.FAILED, "the position still changes" if abs(speed) >= slow else "it says it moves"
        return None, ""

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
            return Outcome.STANDS, ""
        if moving is True and after_s >= self.fail_s:
            return Outcome.FAILED, "it says it moves"
        return (Outcome.BLIND, "") if after_s >= BLIND_S else (None, "")
