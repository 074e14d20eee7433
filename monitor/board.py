"""The board: what the window says at one moment, in words and numbers. Pure: presenter and time in, one value out.

The same words as every other view (monitor.presenter, monitor.wording); only sizes and places are the window's own.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from monitor.presenter import Line, Presenter, Tone
from monitor.wording import SILENT, number

SIGNAL_LOST = "signal lost"
UNBELIEVED = "do not trust the numbers"
DECIMALS_MAX = 3


@dataclass(frozen=True, slots=True)
class Board:
    """Texts are complete with units. percent and band: of the expected break load."""

    word: str
    word_rest: str
    tone: Tone
    current: bool
    believed: bool  # False: fresh, but the signal itself is lost
    load: str
    stress: str
    gross: str
    percent: float | None
    band: tuple[float, float] | None
    expected: str
    bar: str
    place: str
    told: Line  # the one line of instruction or fault
    mark: str  # simulated or replayed data, else empty
    frame: str
    data: Line
    operator: str
    facts: tuple[Line, ...]
    moving: bool


def board_of(presenter: Presenter, now_s: float) -> Board:
    """Everything the window shows but traces and drawing."""
    lines = {line.label: line for line in presenter.lines(now_s)}
    summary, state = presenter.summary, presenter.state_body
    word, rest = split_word(lines["state"].text if "load" in lines else SILENT)
    if "load" not in lines:
        rest = lines["state"].text.removeprefix(SILENT).lstrip(", ")
    tone = lines["state"].tone
    current = tone is not Tone.OLD and "load" in lines
    lost = current and word == SIGNAL_LOST
    places = decimals_of(presenter.noise_n)
    return Board(
        word=word,
        word_rest=UNBELIEVED if lost else rest,
        tone=tone,
        current=current,
        believed=current and not lost,
        load=number(summary.get("net_n"), places, "N"),
        stress=number(summary.get("stress_mpa"), 1, "MPa"),
        gross=number(summary.get("gross_n"), places, "N"),
        percent=_finite(summary.get("expected_percent")),
        band=_band(summary),
        expected=_expected(summary),
        bar=_bar(state),
        place=_place(state),
        told=_told(lines),
        mark="PRACTICE - SIMULATED DATA" if presenter.simulated else "",
        frame=presenter.frame,
        data=lines.get("data", Line("data", "", Tone.OLD)),
        operator=str(state.get("operator") or ""),
        facts=_facts(summary, lines),
        moving=presenter.moving,
    )


def split_word(text: str) -> tuple[str, str]:
    """The chief word, and what is said smaller beside it."""
    bare = text.replace(" (not current)", "")
    stale = "not current" if bare != text else ""
    word, _, rest = bare.partition(" - ")
    return word, ", ".join(part for part in (rest, stale) if part)


def decimals_of(noise_n: float | None) -> int:
    """As many decimals as the noise leaves meaning in: 0.15 N gives one."""
    if not noise_n or noise_n <= 0:
        return 1
    return int(min(DECIMALS_MAX, max(0, math.ceil(-math.log10(noise_n)))))


def _told(lines: Mapping[str, Line]) -> Line:
    """A grave fault first, then cautions about recording or the bar, then what to do."""
    do_now = lines.get("do now", Line("do now", "is `midspan serve` running?", Tone.STOP))
    if "fault" in lines:
        return lines["fault"]
    for label in ("recording", "caution"):
        if label in lines:
            return Line(label, f"{lines[label].text}   -   {do_now.text}", lines[label].tone)
    return Line("do now", do_now.text, Tone.STOP) if lines["state"].tone is Tone.STOP else do_now


def _bar(state: Mapping[str, Any]) -> str:
    run = state.get("run")
    if run:
        again = f"  loading {run['loading']}" if int(run.get("loading") or 1) > 1 else ""
        return f"{run['specimen']}{again}"
    return f"next {state['next']}" if state.get("next") else str(state.get("shown") or "-")


def _place(state: Mapping[str, Any]) -> str:
    bars = int(state.get("bars") or 0)
    if not bars:
        return ""
    if state.get("bar"):
        return f"{state['bar']} of {bars}"
    return f"{state.get('broken', 0)} of {bars} broken"


def _band(summary: Mapping[str, Any]) -> tuple[float, float] | None:
    expected = _finite(summary.get("expected_n"))
    low, high = _finite(summary.get("band_low_n")), _finite(summary.get("band_high_n"))
    if not expected or low is None or high is None:
        return None
    return 100.0 * low / expected, 100.0 * high / expected


def _expected(summary: Mapping[str, Any]) -> str:
    percent, expected = _finite(summary.get("expected_percent")), _finite(summary.get("expected_n"))
    if percent is None or expected is None:
        return "-"
    wait_s = _finite(summary.get("to_band_s"))
    soon = f", band in {wait_s:.0f} s" if wait_s is not None and 0.5 < wait_s < 600 else ""
    origin = "bars so far" if summary.get("band_from_bars") else "plan"
    return f"{number(percent, 0, '%')} of {number(expected, 0, 'N')} expected ({origin}){soon}"


def _facts(summary: Mapping[str, Any], lines: Mapping[str, Line]) -> tuple[Line, ...]:
    """Small numbers beside the drawing."""
    value = summary.get
    facts = [
        Line("rate", number(value("stress_rate_mpa_s"), 1, "MPa/s")),
        Line("strain", number(_times(value("strain"), 1e3), 3, "mm/m")),
        Line("deflection", number(_times(value("deflection_mm"), 1e3), 1, "µm")),
        Line("highest", number(value("highest_n"), 1, "N")),
    ]
    if value("position_mm") is not None:
        facts.append(Line("crosshead", number(value("position_mm"), 3, "mm")))
    if value("stiffness_of_expected") is not None:
        facts.append(Line("stiffness", number(_times(value("stiffness_of_expected"), 100.0), 0, "% of card")))
    return tuple(facts)


def _times(value: float | None, factor: float) -> float | None:
    return None if value is None else value * factor


def _finite(value: Any) -> float | None:
    return float(value) if isinstance(value, int | float) and math.isfinite(value) else None
