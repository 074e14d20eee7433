"""The presenter: updates in, the lines that every view shows out. Pure: time is an argument.

What is old, lost, simulated or unknown says so. Words live in monitor.wording, so that all views say the same.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Mapping
from dataclasses import dataclass
from enum import Enum
from typing import Any

from daq.stream.updates import Update
from monitor.standing import Standing
from monitor.wording import (
    ENDED,
    NOT_CURRENT,
    REPLAYED,
    SILENT,
    expected_text,
    fault_text,
    instruction,
    number,
    recording_text,
    result_text,
)

STALE_S = 3.0  # trade judgement, no source: older data are grey and said to be not current
NO_CONTACT_S = 10.0
DATA_OLD_S = 1.0  # of the newest sample: above, its age is a caution
RESULTS_MAX = 1_000
GRAVE = ("stop", "emergency")
AT_REST = "at rest"


class Tone(Enum):
    """What kind of message a line is; a view adds shape and position, never colour alone."""

    PLAIN = "plain"
    GOOD = "good"
    CAUTION = "caution"
    STOP = "stop"
    OLD = "not current"


@dataclass(frozen=True, slots=True)
class Line:
    """One line of a view."""

    label: str
    text: str
    tone: Tone = Tone.PLAIN


class Presenter:
    """Holds what is known and words it."""

    def __init__(self) -> None:
        self._state: Mapping[str, Any] = {}
        self._summary: Mapping[str, Any] = {}
        self._results: deque[Mapping[str, Any]] = deque(maxlen=RESULTS_MAX)
        self._heard_s = self._summed_s = float("-inf")
        self._monitor_only = False
        self._standing, self._towards = Standing(), 1
        self.frame = ""
        self.simulated = False
        self.noise_n: float | None = None  # of the quiet record
        self.lost_updates = 0

    @property
    def results(self) -> tuple[Mapping[str, Any], ...]:
        """Of this series, in the order in which they came; the newest last."""
        return tuple(self._results)

    @property
    def state(self) -> str:
        return str(self._state.get("state", "unknown - look at the frame"))

    @property
    def state_body(self) -> Mapping[str, Any]:
        """The newest state update as it came."""
        return self._state

    @property
    def summary(self) -> Mapping[str, Any]:
        """The newest numbers as they came."""
        return self._summary

    @property
    def moving(self) -> bool:
        """Whether the newest numbers say that the crosshead moves, or may move by itself."""
        told = self._summary.get
        return bool(told("armed") or told("moving") or (told("inputs") or {}).get("moving"))

    def is_proven_at_rest(self, now_s: float) -> bool:
        """At rest by the state, by the numbers, and both are fresh: then a key may be a letter instead of a stop."""
        age_s = self._summary.get("data_age_s")
        fresh = age_s is not None and age_s + max(0.0, now_s - self._summed_s) <= DATA_OLD_S
        return self.state == AT_REST and fresh and not self.moving and now_s - self._heard_s <= DATA_OLD_S

    def is_current(self, now_s: float) -> bool:
        """Whether the station has been heard lately."""
        return now_s - self._heard_s <= STALE_S

    def take_look(self, look: Mapping[str, Any], now_s: float, *, newer_heard: bool = False) -> None:
        """A late joiner's start. newer_heard: updates after this look have come; state and numbers stay theirs."""
        if not newer_heard:
            self._state, self._summary = look["state"], look["summary"]
            self._heard_s = self._summed_s = now_s
            self._standing = Standing()
            for event in look.get("events") or ():
                self._standing.take_event(event)
        self._towards = int((look["frame"].get("motion") or {}).get("position_sign", 1))
        self.frame = str(look["frame"]["name"])
        self.simulated = bool(look["frame"]["simulated"])
        self._monitor_only = look["frame"].get("motion") is None
        self.noise_n = (look["frame"].get("cell") or {}).get("noise_quiet_n")
        sitting = look.get("sitting") or {"bars": []}
        self._results.clear()
        self._results.extend(
            bar["result"] | {"specimen": bar["number"]} for bar in sitting["bars"] if bar["result"]
        )

    def take(self, update: Update, now_s: float) -> None:
        """One update of the feed."""
        self._heard_s = now_s
        self.frame, self.simulated = update.frame, update.simulated
        if update.kind == "state":
            self._state = update.body
        elif update.kind == "summary":
            self._summary, self._summed_s = update.body, now_s
            self._stand()
        elif update.kind == "event":
            self._standing.take_event(update.body)
        elif update.kind == "result":
            result = dict(update.body.get("result") or {})
            self._results.append({**result, "specimen": update.body.get("specimen", "")})

    def _stand(self) -> None:
        """Where the crosshead stands between two loadings."""
        position_mm = self._summary.get("position_mm")
        if self.state == AT_REST and not self._state.get("run") and position_mm is not None:
            self._standing.take_position(self._towards * float(position_mm))

    def lines(self, now_s: float) -> list[Line]:
        """The view in the order in which it is read from 2 m: state, load, percent, bar, instruction or fault."""
        age_s = 0.0 if self.state == ENDED else now_s - self._heard_s
        if age_s > NO_CONTACT_S:
            if not self.frame:
                return [self._frame_line(), Line("state", f"{SILENT}, not heard yet", Tone.STOP)]
            told = f"{SILENT} for {age_s:.0f} s"
            return [
                self._frame_line(),
                Line("state", told, Tone.STOP),
                Line("do now", NOT_CURRENT, Tone.STOP),
            ]
        old = age_s > STALE_S
        tone = Tone.OLD if old else state_tone(self.state)
        lines = [self._frame_line(), Line("state", self.state + (" (not current)" if old else ""), tone)]
        lines += self._numbers(tone)
        lines.append(self._data_line(now_s))
        lines += self._bar_lines()
        lines += self._warnings()
        do_now = Line("do now", NOT_CURRENT, Tone.CAUTION) if old else Line("do now", self._instruction())
        lines.append(do_now)
        return lines

    def _frame_line(self) -> Line:
        name = self.frame + ("   monitor only: midspan cannot stop it" if self._monitor_only else "")
        if self.simulated:
            return Line("frame", f"{name}   PRACTICE - SIMULATED DATA", Tone.CAUTION)
        return Line("frame", name)

    def _numbers(self, tone: Tone) -> list[Line]:
        value = self._summary.get
        net, gross = number(value("net_n"), 1, "N"), number(value("gross_n"), 1, "N")
        stress = number(value("stress_mpa"), 1, "MPa")
        rate = number(value("stress_rate_mpa_s"), 1, "MPa/s")
        lines = [
            Line("load", f"{net} net   {gross} gross", tone),
            Line("stress", f"{stress}   {rate}", tone),
            Line("expected", expected_text(self._summary), tone),
        ]
        if value("position_mm") is not None:
            lines.append(Line("crosshead", number(value("position_mm"), 3, "mm"), tone))
        return lines

    def _data_line(self, now_s: float) -> Line:
        """How old the newest sample is, and what did not reach this view."""
        age_s = self._summary.get("data_age_s")
        told, tone = "no samples yet", Tone.CAUTION
        if age_s is not None:
            age_s += max(0.0, now_s - self._summed_s)
            told, tone = f"{age_s:.1f} s old", Tone.PLAIN
            if age_s > DATA_OLD_S:
                told, tone = f"NOT CURRENT: {age_s:.0f} s old", Tone.CAUTION
        if self.lost_updates:
            told += f"   {self.lost_updates} updates lost in this view; the record has all"
        return Line("data", told, tone)

    def _bar_lines(self) -> list[Line]:
        run = self._state.get("run")
        series, bars = self._state.get("series", ""), self._state.get("bars", 0)
        if run:
            place = f"   bar {self._state['bar']} of {bars}" if bars and self._state.get("bar") else ""
            text = f"{run['specimen']} loading {run['loading']}{place}"
        else:
            text = "no series open"
            if bars:
                ahead = f"next {self._state['next']}" if self._state.get("next") else "none left"
                text = f"none called; {ahead}; {self._state.get('broken', 0)} of {bars} broken"
        lines = [Line("bar", f"{text}   {series}")]
        if self._state.get("operator"):
            lines.append(Line("operator", str(self._state["operator"])))
        if self._results:
            lines.append(Line("last bar", result_text(self._results[-1])))
        return lines

    def _warnings(self) -> list[Line]:
        lines = []
        recording = recording_text(self._state.get("reports") or {}, self._state.get("lost_entries", 0))
        if recording and self.state != ENDED:
            lines.append(Line("recording", recording, Tone.CAUTION))
        faults = self._state.get("faults") or []
        grave = [fault for fault in faults if fault.get("severity") in GRAVE]
        if grave:
            lines.append(Line("fault", counted(grave), Tone.STOP))
        elif faults:
            lines.append(Line("caution", counted(faults), Tone.CAUTION))
        return lines

    def _instruction(self) -> str:
        run_open, bars = bool(self._state.get("run")), self._state.get("bars", 0)
        if self._state.get("replayed") and self.state == AT_REST and not run_open:
            return REPLAYED
        all_done = bool(bars) and self._state.get("broken", 0) == bars
        return instruction(
            self.state,
            run_open=run_open,
            monitor_only=self._monitor_only,
            all_done=all_done,
            down=self._standing.is_down,
        )


def counted(faults: list[Mapping[str, Any]]) -> str:
    """The first cause, and how many followed."""
    followers = f"   (+{len(faults) - 1} more)" if len(faults) > 1 else ""
    return fault_text(faults[0]) + followers


def state_tone(state: str) -> Tone:
    if state in (
        "stopped",
        "signal lost",
        "overload",
        "shield open",
        "emergency stop",
        "broken? - still loaded",
    ):
        return Tone.STOP
    if state.startswith(("unknown", "bench process", ENDED)):
        return Tone.STOP
    return Tone.GOOD if state in ("ready", "broken - unloaded") else Tone.PLAIN
