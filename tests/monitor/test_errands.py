"""Errands and the stop line: outcomes as values, bounds on every queue, a stop that never waits for a command."""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from daq.errors import MidspanError, Refused
from monitor.errands import ERRANDS_MAX, Answer, Errands, NoDesk, StopLine, carry, no_desk


def failing(error: Exception) -> Answer:
    def work(desk: object) -> dict[str, Any]:
        raise error

    return carry("m", work, NoDesk())


def test_every_expected_failure_is_an_answer() -> None:
    assert failing(Refused("m", ("a", "b"))).missing == ("a", "b")
    assert failing(MidspanError("no station")).trouble == "no station"
    assert "full" in failing(OSError(28, "disk full")).trouble
    assert carry("look", lambda desk: None, NoDesk()).good


def test_what_is_asked_is_bounded_and_answered_in_order() -> None:
    gate = threading.Event()

    @contextmanager
    def desk() -> Iterator[NoDesk]:
        gate.wait(5.0)
        yield NoDesk()

    errands = Errands(desk)
    taken = [errands.ask(str(number), lambda desk: {}) for number in range(ERRANDS_MAX + 5)]
    assert taken == [True] * ERRANDS_MAX + [False] * 5
    errands.start()
    gate.set()
    names: list[str] = []
    until_s = time.monotonic() + 5.0
    while len(names) < ERRANDS_MAX and time.monotonic() < until_s:
        names += [answer.name for answer in errands.answers()]
    assert names == [str(number) for number in range(ERRANDS_MAX)]
    errands.end()
    errands.join(5.0)
    assert not errands.is_alive()


def test_a_stop_passes_a_command_that_waits_for_its_answer() -> None:
    stopped, hangs = threading.Event(), threading.Event()

    def stop(who: str) -> str:
        stopped.set()
        return ""

    errands, line = Errands(no_desk), StopLine(stop)
    errands.start()
    line.start()
    errands.ask("start", lambda desk: {"waited": hangs.wait(10.0)})
    line.stop("operator's key Space")
    assert stopped.wait(5.0) and not list(errands.answers())
    hangs.set()
