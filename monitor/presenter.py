"""The presenter: updates in, the words and numbers that every view shows out. Pure: time is an argument.

All wording of states, faults and results lives here, so that window, terminal and page say the same thing.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from enum import Enum
from typing import Any

from daq.stream.updates import Update

STALE_S = 3.0  # job.md J3: older data are grey and said to be not current
NO_CONTACT_S = 10.0

INSTRUCTIONS: Mapping[str, str] = {
    "at rest": "mount the next bar, shut the shield, then call it",
    "ready": "hands off; start when the shield is shut and eyes are protected",
    "approaching": "approaching; hands off",
    "in contact": "in contact",
    "seating": "seating",
    "loading": "loading; watch the bar, stand clear",
    "holding": "holding",
    "broken - unloaded": "broken; wait for standstill, keep the pieces together",
    "broken? - still loaded": "LOAD STILL ON THE BAR - keep the shield shut",
    "stopped": "stopped; look at the frame, then reset",
    "unloading": "unloading; hands off",
    "returning": "returning; hands off",
    "signal lost": "no signal - the bar may be loaded; keep the shield shut",
    "overload": "overload - check zero and a check weight before going on",
    "shield open": "shield open; shut it, then reset",
    "emergency stop": "emergency stop; release it at the machine, then reset",
    "unknown - look at the frame": "look at the frame: is a bar mounted or loaded? then reset with your word on it",
}


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
        self.results: list[Mapping[str, Any]] = []
        self._heard_s = float("-inf")
        self.frame = ""
        self.simulated = False

    def take_look(self, look: Mapping[str, Any], now_s: float) -> None:
        """A late joiner's start."""
        self._state = look["state"]
        self._summary = look["summary"]
        self.frame = str(look["frame"]["name"])
        self.simulated = bool(look["frame"]["simulated"])
        sitting = look.get("sitting") or {"bars": []}
        self.results = [
            bar["result"] | {"specimen": bar["number"]} for bar in sitting["bars"] if bar["result"]
        ]
        self._heard_s = now_s

    def take(self, update: Update, now_s: float) -> None:
        """One update of the feed."""
        self._heard_s = now_s
        self.frame, self.simulated = update.frame, update.simulated
        if update.kind == "state":
            self._state = update.body
        elif update.kind == "summary":
            self._summary = update.body
        elif update.kind == "result":
            self.results.append(
                {**update.body.get("result", {}), "specimen": update.body.get("specimen", "")}
            )

    def lines(self, now_s: float) -> list[Line]:
        """The view in the order of job.md 5: state, load, percent, bar, instruction or fault."""
        age_s = now_s - self._heard_s
        if age_s > NO_CONTACT_S:
            return [Line("state", f"no contact with the station for {age_s:.0f} s", Tone.STOP)]
        state = str(self._state.get("state", "unknown - look at the frame"))
        tone = Tone.OLD if age_s > STALE_S else state_tone(state)
        lines = [Line("state", state + (" (not current)" if age_s > STALE_S else ""), tone)]
        if self.simulated:
            lines.insert(0, Line("frame", f"{self.frame}  [PRACTICE - SIMULATED DATA]", Tone.CAUTION))
        else:
            lines.insert(0, Line("frame", self.frame))
        lines += self._numbers(tone)
        lines += self._bar_lines()
        lines.append(self._instruction(state))
        return lines

    def _numbers(self, tone: Tone) -> list[Line]:
        value = self._summary.get
        stress = words(value("stress_mpa"), 1, "MPa")
        percent = value("expected_percent")
        band = f"{percent:3.0f} % of the expected break load" if percent is not None else "-"
        rate = words(value("stress_rate_mpa_s"), 1, "MPa/s")
        return [
            Line(
                "load", f"{words(value('net_n'), 1, 'N')} net   {words(value('gross_n'), 1, 'N')} gross", tone
            ),
            Line("stress", f"{stress}   {rate}", tone),
            Line("expected", band, tone),
            Line("crosshead", words(value("position_mm"), 3, "mm"), tone),
        ]

    def _bar_lines(self) -> list[Line]:
        run = self._state.get("run")
        series, bars = self._state.get("series", ""), self._state.get("bars", 0)
        if run:
            text = f"{run['specimen']} loading {run['loading']}   bar {self._state.get('bar', 0)} of {bars}"
        else:
            text = f"none mounted   {bars} bars" if bars else "no series open"
        lines = [Line("bar", f"{text}   {series}")]
        if self.results:
            lines.append(Line("last result", result_text(self.results[-1])))
        return lines

    def _instruction(self, state: str) -> Line:
        faults = self._state.get("faults") or []
        grave = [fault for fault in faults if fault.get("severity") in ("stop", "emergency")]
        if grave:
            return Line("fault", fault_text(grave[0]), Tone.STOP)
        if faults:
            return Line("caution", fault_text(faults[0]), Tone.CAUTION)
        return Line("do now", INSTRUCTIONS.get(state, ""))


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
    if state.startswith(("unknown", "bench process")):
        return Tone.STOP
    return Tone.GOOD if state in ("ready", "broken - unloaded") else Tone.PLAIN


def words(value: float | None, decimals: int, unit: str) -> str:
    """A number with its unit, or a dash where there is none."""
    return "-" if value is None or value != value else f"{value:.{decimals}f} {unit}"


def fault_text(event: Mapping[str, Any]) -> str:
    """What, value, limit, what was done, what to do now."""
    what = str(event.get("what") or event["event"].replace("_", " "))
    parts = [what]
    if event.get("value") is not None and event.get("limit") is not None:
        unit = event.get("unit", "")
        parts.append(f"{event['value']:.4g} {unit}, limit {event['limit']:.4g} {unit}".replace(" ,", ","))
    parts += [str(event[key]) for key in ("detail", "did", "do_now") if event.get(key)]
    return "; ".join(parts)


def result_text(result: Mapping[str, Any]) -> str:
    """One bar's outcome in a line."""
    strength = words(result.get("strength_mpa"), 1, "MPa")
    load = words(result.get("peak_n"), 1, "N")
    verdict = result.get("break_class") or result.get("verdict") or ""
    return f"{result.get('specimen', '')}: {strength} at {load}   {verdict}"
