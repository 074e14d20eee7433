"""A sealed record played through the same view as a live run: rows and events become looks and updates again. Pure.

Nothing is made up: between two moments of the record the view stands still. The mark REPLAY never goes.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from daq.stream.block import Floats
from daq.stream.updates import Update
from monitor.said import Said

SPEEDS = (0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0)
STEP_SHARE = 0.05
MOVING_WORDS = frozenset({"approaching", "seating", "loading", "unloading", "returning"})


@dataclass(frozen=True, slots=True, eq=False)
class Recording:
    """What a sealed record holds, as the command line reads it.

    columns: (n,) each, as monitor.tracebuffer.COLUMNS; events in order; sitting: the series' bars as the station tells
    them; expected_n, band_n: of the plan.
    """

    columns: Mapping[str, Floats]
    events: Sequence[Mapping[str, Any]]
    cards: Mapping[str, Any]
    result: Mapping[str, Any]
    meta: Mapping[str, Any]
    expected_n: float | None = None
    band_n: tuple[float, float] | None = None
    sitting: Mapping[str, Any] | None = None
    said: Said | None = None  # what stands by the notes beside the record

    @property
    def begin_s(self) -> float:
        return float(self.columns["time_s"][0]) if len(self.columns["time_s"]) else 0.0

    @property
    def end_s(self) -> float:
        times = self.columns["time_s"]
        told = [float(event["time_s"]) for event in self.events if event.get("time_s") is not None]
        return max([float(times[-1]) if len(times) else 0.0, *told])

    @property
    def break_s(self) -> float | None:
        for event in self.events:
            if event.get("event") == "fracture":
                return float(event.get("onset_s") or event["time_s"])
        return None


@dataclass(slots=True)
class Player:
    """Plays a recording: a feed for the window. Time is given to it."""

    recording: Recording
    lost_updates: int = 0
    speed: float = 1.0
    playing: bool = True
    at_s: float = field(init=False)
    _told_s: float = field(init=False)
    _number: int = 0

    def __post_init__(self) -> None:
        self.at_s = self._told_s = self.recording.begin_s

    def advance(self, seconds: float) -> list[Update]:
        """The clock has gone on; what the record tells until then."""
        if self.playing:
            self.at_s = min(self.recording.end_s, self.at_s + seconds * self.speed)
        return self._tell()

    def seek(self, at_s: float) -> Mapping[str, Any]:
        """Another moment; returns the look of it."""
        self.at_s = min(self.recording.end_s, max(self.recording.begin_s, at_s))
        self._told_s = self.at_s
        return self.look()

    def step(self, turns: int) -> Mapping[str, Any]:
        """Back or forward by twentieths of the record."""
        length_s = self.recording.end_s - self.recording.begin_s
        return self.seek(self.at_s + turns * STEP_SHARE * length_s)

    def change_speed(self, turns: int) -> None:
        place = min(len(SPEEDS) - 1, max(0, SPEEDS.index(self.speed) + turns))
        self.speed = SPEEDS[place]

    # --- looks and updates
    def look(self) -> dict[str, Any]:
        """Everything until now."""
        recording = self.recording
        rows = int(np.searchsorted(recording.columns["time_s"], self.at_s, side="right"))
        return {
            "frame": recording.cards["frame"],
            "state": self._state(),
            "summary": self._summary(rows),
            "sitting": self._sitting(),
            "opened": self._opened(),
            "events": [event for event in recording.events if self._is_past(event)],
            "columns": {name: column[:rows] for name, column in recording.columns.items()},
        }

    def _opened(self) -> dict[str, Any]:
        """As the event run_opened: the cards of the run."""
        cards, meta = self.recording.cards, self.recording.meta
        run = {name: meta[name] for name in ("run_id", "specimen", "series", "loading")}
        fixture = str((cards.get("run") or {}).get("fixture", ""))
        return {
            "run": run,
            "method": cards["method"],
            "specimen_card": cards["specimen"],
            "fixture": fixture,
            "frame": cards["frame"],
        }

    def _sitting(self) -> dict[str, Any] | None:
        """The series as it stood: what was broken later is not known yet, this bar's number only at the end."""
        if self.recording.sitting is None:
            return None
        bars, past = [], True
        for bar in self.recording.sitting["bars"]:
            if bar["number"] == self.recording.meta["specimen"]:
                past = False
                over = self.at_s >= self.recording.end_s
                bars.append(bar if over else {**bar, "state": "open", "result": {}})
            else:
                bars.append(bar if past else {**bar, "state": "waiting", "result": {}, "record": ""})
        return {**self.recording.sitting, "bars": bars}

    def _is_past(self, event: Mapping[str, Any]) -> bool:
        return float(event.get("time_s") or 0.0) <= self.at_s and event.get("event") not in (
            "state",
            "run_opened",
        )

    def _state(self) -> dict[str, Any]:
        word, over = "at rest", False
        faults = []
        for event in self.recording.events:
            if float(event.get("time_s") or 0.0) > self.at_s:
                break
            if event.get("event") == "state":
                word = str(event["to"])
            over |= event.get("event") == "run_closed"
            if event.get("severity") in ("stop", "emergency", "caution"):
                faults.append(event)
        meta, bars = self.recording.meta, (self.recording.sitting or {}).get("bars", ())
        numbers = [bar["number"] for bar in bars]
        place = numbers.index(meta["specimen"]) + 1 if meta["specimen"] in numbers else 0
        return {
            "state": word,
            "run": None if word == "at rest" and over else self._opened()["run"],
            "replayed": True,
            "shown": meta["specimen"],
            "bar": place,
            "bars": len(bars),
            "series": meta["series"],
            "faults": faults[-8:],
            "operator": str((self.recording.cards.get("run") or {}).get("operator", "")),
        }

    def _summary(self, rows: int) -> dict[str, Any]:
        if rows == 0:
            return {"data_age_s": 0.0}
        columns, recording = self.recording.columns, self.recording
        summary: dict[str, Any] = {name: finite(column[rows - 1]) for name, column in columns.items()}
        net_n, expected_n = summary.get("net_n"), recording.expected_n
        tare_n = self.recording.result.get("tare_n")
        summary["gross_n"] = None if net_n is None or tare_n is None else net_n + float(tare_n)
        summary["highest_n"] = finite(np.fmax.reduce(columns["net_n"][:rows]))
        summary["stress_rate_mpa_s"] = self._rate(rows)
        if expected_n:
            summary["expected_n"] = expected_n
            summary["expected_percent"] = None if net_n is None else 100.0 * net_n / expected_n
        if recording.band_n is not None:
            summary["band_low_n"], summary["band_high_n"] = recording.band_n
        return {**summary, "data_age_s": 0.0, "moving": self._state()["state"] in MOVING_WORDS}

    def _rate(self, rows: int) -> float | None:
        """Stress rate over the last half second; none after the break."""
        columns, break_s = self.recording.columns, self.recording.break_s
        times = columns["time_s"]
        first = int(np.searchsorted(times, times[rows - 1] - 0.5))
        if rows - first < 3 or (break_s is not None and times[rows - 1] >= break_s):
            return None
        span_s = float(times[rows - 1] - times[first])
        change = float(columns["stress_mpa"][rows - 1] - columns["stress_mpa"][first])
        return finite(change / span_s) if span_s > 0 else None

    def _tell(self) -> list[Update]:
        """Updates from what was told last until now."""
        recording, times = self.recording, self.recording.columns["time_s"]
        first, last = (int(np.searchsorted(times, t, side="right")) for t in (self._told_s, self.at_s))
        updates = [
            self._update("event", event)
            for event in recording.events
            if self._told_s < float(event.get("time_s") or 0.0) <= self.at_s
            and event.get("event") != "run_opened"
        ]
        self._told_s = self.at_s
        if last > first:
            rows = {name: column[first:last] for name, column in recording.columns.items()}
            updates.insert(0, self._update("trace", {"run_id": recording.meta["run_id"]}, rows))
        updates += [self._update("state", self._state()), self._update("summary", self._summary(last))]
        if self.at_s >= recording.end_s:
            updates.append(self._update("result", self.sealed()))
        return updates

    def sealed(self) -> dict[str, Any]:
        """The result as the station tells it."""
        return {**self.recording.meta, "result": self.recording.result}

    def _update(
        self, kind: str, body: Mapping[str, Any], columns: Mapping[str, Floats] | None = None
    ) -> Update:
        self._number += 1
        frame = self.recording.cards["frame"]
        utc = str(self.recording.meta.get("created_utc", ""))
        return Update(
            self._number, kind, str(frame["name"]), utc, bool(frame["simulated"]), body, columns or {}
        )


def finite(value: Any) -> float | None:
    number = float(value)
    return number if np.isfinite(number) else None
