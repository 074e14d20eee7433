"""A frame without motion: the person's own machine loads the bar; midspan sees it, records it, and stops nothing."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from daq.cards.load import example_path, load_frame, load_method
from daq.errors import Refused
from daq.stream.block import Block
from daq.watch.pipeline import Pipeline, Proven
from daq.watch.requests import CloseRun, Jog, OpenRun, Reset, StartRun, StopRequest
from daq.watch.values import Event, State

RATE_HZ = 10.0
LOAD_N_S = 50.0
BREAK_N = 2900.0


class Watched:
    """The pipeline fed with ten rows a second of a force that the test dictates. No action may ever come out."""

    def __init__(self) -> None:
        self.pipe = Pipeline(
            load_frame(example_path("kiln-lane-c.toml")), clean_start=True, proven=Proven(True, True)
        )
        self.rng = np.random.default_rng(3)
        self.index, self.now_s = 0, 0.0
        self.events: list[Event] = []

    def feed(self, seconds: float, force_n: Callable[[float], float]) -> None:
        """force_n: of the time since this call."""
        start_s = self.now_s
        for _ in range(round(seconds * RATE_HZ)):
            self.now_s += 1.0 / RATE_HZ
            count = force_n(self.now_s - start_s) + self.rng.normal(0.0, 0.4)
            block = Block(0, self.index, np.array([self.now_s]), np.array([[count]]), 0)
            self.index += 1
            step = self.pipe.advance(block, self.now_s)
            assert step.actions == ()
            self.events += step.events

    def ask(self, request: object) -> None:
        step = self.pipe.request(request, self.now_s)  # type: ignore[arg-type]
        assert step.actions == ()
        self.events += step.events

    def names(self) -> list[str]:
        return [event.name for event in self.events]

    def open_run(self) -> Watched:
        self.feed(3.0, lambda t: 0.0)
        method = load_method(example_path("mortar-prisms.toml")).model_dump(mode="json")
        run = {"run_id": "r1", "series": "s", "specimen": "M-1", "loading": 1, "operator": "Watcher"}
        specimen = {"number": "M-1", "width_mm": [40.0], "thickness_mm": [40.0]}
        self.ask(OpenRun(run=run, specimen=specimen, method=method, fixture="three-100"))
        self.feed(5.0, lambda t: 0.0)
        assert self.pipe.state is State.READY, self.events
        return self


def ramp(t: float) -> float:
    return LOAD_N_S * t


def test_a_bar_loaded_by_the_machines_own_controls_is_seen_recorded_and_closed() -> None:
    watched = Watched().open_run()
    watched.feed(BREAK_N / LOAD_N_S, ramp)
    assert watched.pipe.state is State.LOADING
    watched.feed(8.0, lambda t: 0.0)
    names = watched.names()
    order = [
        "run_opened",
        "tared",
        "ready",
        "started",
        "approach_touch",
        "fracture",
        "residual",
        "run_closed",
    ]
    assert [name for name in names if name in order] == order
    fracture = next(event for event in watched.events if event.name == "fracture")
    assert fracture.fields["verdict"] == "sudden break"
    assert float(str(fracture.fields["forecast_n"])) == pytest.approx(BREAK_N, abs=20.0)
    assert "stop_sent" not in names and "stop_failed" not in names
    assert watched.pipe.state is State.AT_REST


def test_a_limit_is_told_with_what_the_person_must_do_and_the_recording_goes_on() -> None:
    watched = Watched().open_run()
    watched.feed(86.0, ramp)  # 4300 N: far above what a bar of this kind bears
    limits = [event for event in watched.events if event.name == "limit" and event.severity.value == "stop"]
    assert limits and all(event.fields["did"] == "told" for event in limits)
    assert "STOP IT BY ITS OWN CONTROLS" in str(limits[0].fields["do_now"])
    assert watched.pipe.state is State.LOADING and watched.pipe.run is not None
    watched.feed(8.0, lambda t: 0.0)
    closed = next(event for event in watched.events if event.name == "run_closed")
    assert closed.fields["verdict"] == "sudden break" and not closed.fields["interrupted"]


def test_start_and_moves_are_refused_and_a_stop_says_that_it_cannot() -> None:
    watched = Watched().open_run()
    with pytest.raises(Refused, match="monitor only: start the machine by its own controls"):
        watched.ask(StartRun())
    with pytest.raises(Refused, match="no motion section"):
        watched.ask(Jog(1.0, 1.0))
    watched.feed(20.0, ramp)
    watched.ask(StopRequest("test"))
    assert "nothing to stop with" in str(watched.events[-1].fields["text"])
    assert watched.pipe.state is State.LOADING and watched.pipe.run is not None


def test_a_fault_of_a_neighbour_is_told_and_a_lost_signal_ends_the_run() -> None:
    watched = Watched().open_run()
    watched.feed(20.0, ramp)
    step = watched.pipe.fault("station_silent", "", watched.now_s)
    assert step.actions == () and step.events[-1].fields["did"] == "told"
    assert watched.pipe.state is State.LOADING
    step = watched.pipe.fault("link_lost", "cable", watched.now_s)
    assert step.actions == () and watched.pipe.state is State.SIGNAL_LOST
    watched.feed(5.0, lambda t: 1000.0)
    assert watched.names()[-1] == "run_closed" or "run_closed" in watched.names()


def test_the_person_can_close_the_run_and_go_on_after_a_reset() -> None:
    watched = Watched().open_run()
    watched.feed(20.0, ramp)
    watched.ask(CloseRun("bar was crooked"))
    watched.feed(4.0, lambda t: 20.0 * LOAD_N_S)
    closed = next(event for event in watched.events if event.name == "run_closed")
    assert closed.fields["interrupted"]
    watched.ask(Reset("Watcher", looked=True))
    assert watched.pipe.state is State.AT_REST
