"""A window without a daemon: a feed of made updates, a desk that notes what it is asked, a stop line that is heard."""

from __future__ import annotations

import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import numpy as np

from daq.cards.load import example_path, load_frame, load_series
from daq.cli.figures import series_words
from daq.errors import Refused
from daq.stream.updates import Update
from monitor.notes import Notes
from monitor.setting import Setting
from monitor.window import Outside, Window

CARDS = load_series(example_path("demo-series.toml"))
FRAME = load_frame(example_path("kiln-lane-demo.toml"))
FULL_N = 471.0


class MadeFeed:
    """Updates that a test has laid ready, numbered as the station does."""

    def __init__(self) -> None:
        self.lost_updates = 0
        self.number = 0
        self._ready: list[Update] = []

    def lay(self, kind: str, body: dict[str, Any], columns: dict[str, Any] | None = None) -> None:
        self.number += 1
        arrays = {name: np.asarray(column, dtype=np.float64) for name, column in (columns or {}).items()}
        utc = "2026-01-01T00:00:00.000+00:00"
        self._ready.append(Update(self.number, kind, FRAME.name, utc, FRAME.simulated, body, arrays))

    def updates(self, timeout_s: float) -> Iterator[Update]:
        del timeout_s
        ready, self._ready = self._ready, []
        return iter(ready)


class HeardDesk:
    """Answers every command; refuses what it is told to refuse."""

    def __init__(self, look: dict[str, Any]) -> None:
        self.asked: list[tuple[str, dict[str, Any]]] = []
        self.refuses: dict[str, tuple[str, ...]] = {}
        self.answer_look = look

    def do(self, command: str, **words: Any) -> dict[str, Any]:
        self.asked.append((command, words))
        if command in self.refuses:
            raise Refused(command, self.refuses[command])
        return {"questions": []}

    def sit(self, operator: str, *, instead: bool = False) -> None:
        self.asked.append(("sit", {"operator": operator, "instead": instead}))

    def look(self) -> dict[str, Any]:
        return self.answer_look

    def commands(self) -> list[str]:
        return [name for name, _ in self.asked]


def run_of(specimen: str = "DEMO-01") -> dict[str, Any]:
    return {"run_id": f"run-{specimen}", "specimen": specimen, "loading": 1, "series": CARDS.card.name}


def opened(specimen: str = "DEMO-01") -> dict[str, Any]:
    bar = next(bar for bar in CARDS.specimens if bar.number == specimen)
    return {
        "event": "run_opened",
        "time_s": 0.0,
        "severity": "remark",
        "run": run_of(specimen),
        "method": CARDS.method.model_dump(mode="json"),
        "specimen_card": bar.model_dump(mode="json"),
        "fixture": CARDS.fixture,
        "frame": FRAME.model_dump(mode="json"),
    }


def state_body(state: str, **more: Any) -> dict[str, Any]:
    body = {
        "state": state,
        "run": None,
        "bar": 0,
        "bars": 6,
        "broken": 0,
        "next": "DEMO-01",
        "series": CARDS.card.name,
    }
    return {**body, "operator": "A. Person", "faults": [], "reports": {}, **more}


def summary_body(net_n: float, **more: Any) -> dict[str, Any]:
    body = {
        "net_n": net_n,
        "gross_n": net_n + 2.4,
        "stress_mpa": net_n / 1.2,
        "deflection_mm": net_n / 5000.0,
    }
    body |= {
        "expected_n": FULL_N,
        "expected_percent": 100 * net_n / FULL_N,
        "band_low_n": 400.0,
        "band_high_n": 520.0,
    }
    return {**body, "moving": False, "armed": False, "data_age_s": 0.02, **more}


def look_of(state: str = "at rest", **more: Any) -> dict[str, Any]:
    bars = [
        {
            "number": bar.number,
            "state": "waiting",
            "loading": 0,
            "record": "",
            "result": {},
            "specimen": bar.model_dump(mode="json"),
        }
        for bar in CARDS.specimens
    ]
    sitting = {
        "series": CARDS.card.name,
        "fixture": CARDS.fixture,
        "next": bars[0]["number"],
        "method_card": CARDS.method.model_dump(mode="json"),
        "bars": bars,
    }
    look = {"frame": FRAME.model_dump(mode="json"), "state": state_body(state), "summary": summary_body(0.0)}
    return {**look, "update": 0, "sitting": sitting, "opened": None, "events": [], "trace": {}, **more}


class WindowRig:
    """Everything a test touches."""

    def __init__(
        self, *, operator: str = "A. Person", setting: Setting | None = None, notes: Notes | None = None
    ) -> None:
        self.feed, self.desk = MadeFeed(), HeardDesk(look_of())
        self.stops: list[tuple[str, float]] = []
        self.stop_answer = ""

        @contextmanager
        def open_desk() -> Iterator[HeardDesk]:
            yield self.desk

        outside = Outside(self.feed, self.stop, open_desk, series_words, operator, notes=notes)
        self.window = Window(outside, setting or Setting(pixel_mm=0.277))

    def stop(self, who: str) -> str:
        self.stops.append((who, time.monotonic()))
        return self.stop_answer

    def be(self, state: str, net_n: float = 0.0, **more: Any) -> None:
        """The frame is in a state, and the window has heard of it."""
        moving = state in ("approaching", "seating", "loading", "returning", "unloading")
        self.feed.lay("state", state_body(state, **more))
        self.feed.lay("summary", summary_body(net_n, moving=moving, armed=moving))
        self.window.turn()

    def load(self, until_n: float, *, rows: int = 3000) -> None:
        """A bar is called, seated and loaded; 1 kS/s."""
        self.feed.lay("event", opened())
        net_n = np.linspace(0.0, until_n, rows)
        time_s = np.arange(rows) / 1000.0
        columns = {"time_s": time_s, "net_n": net_n, "stress_mpa": net_n / 1.2, "strain": net_n / 4.6e5}
        self.feed.lay("trace", {"run_id": "run-DEMO-01"}, {**columns, "deflection_mm": net_n / 5000.0})
        self.feed.lay("event", {"event": "seated", "time_s": 0.8, "severity": "remark"})
        self.be("loading", until_n, run=run_of(), bar=1)

    def break_bar(self, at_n: float = 460.0, *, rows: int = 3000) -> None:
        """Loaded until it breaks, with half a second of tail; sealed."""
        self.load(at_n, rows=rows)
        at_s = rows / 1000.0
        tail_s = at_s + np.arange(500) / 1000.0
        tail_n = 0.3 * at_n * np.exp(-np.arange(500) / 15.0) * np.cos(np.arange(500) * 1.5)
        nothing = np.full(500, np.nan)
        columns = {
            "time_s": tail_s,
            "net_n": tail_n,
            "stress_mpa": tail_n / 1.2,
            "strain": nothing,
            "deflection_mm": nothing,
        }
        self.feed.lay("trace", {"run_id": "run-DEMO-01"}, columns)
        for event in (
            {"event": "fracture", "verdict": "sudden break", "onset_s": at_s},
            {"event": "stopped", "after_s": 0.18, "verified": True},
            {"event": "residual", "force_net_n": 0.1, "unloaded": True},
            {"event": "run_closed", "run_id": "run-DEMO-01", "interrupted": False, "verdict": "sudden break"},
        ):
            self.feed.lay("event", {"time_s": at_s + 0.01, "severity": "remark", **event})
        self.feed.lay(
            "result",
            {"run_id": "run-DEMO-01", "specimen": "DEMO-01", "path": "x.h5", "result": result_of(at_n)},
        )
        self.be("at rest", 0.0, bar=0, broken=1, next="DEMO-02")


def result_of(at_n: float) -> dict[str, Any]:
    strength = {
        "strength_mpa": at_n / 1.2,
        "strength_u_k2_mpa": 4.0,
        "peak_n": at_n,
        "break_class": "sudden break",
    }
    return {**strength, "remarks": [], "interrupted": False}
