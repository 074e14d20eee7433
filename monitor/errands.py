"""What must not hold the window up, in threads of their own: commands to the station, and the stop line.

Two threads that share nothing: while the station hangs and a command waits five seconds for its answer, a stop goes
straight to the bench process all the same. Nothing waits for ever, every queue is bounded.
"""

from __future__ import annotations

import queue
import threading
from collections.abc import Callable, Iterator, Mapping
from contextlib import AbstractContextManager, contextmanager
from dataclasses import dataclass, field
from typing import Any, Protocol, TypeVar

from daq.errors import MidspanError, Refused
from daq.stream.updates import Update

Item = TypeVar("Item")

ERRANDS_MAX = 32
ANSWERS_MAX = 128
NO_FRAME = "a record is being played: no frame listens to this window"


class Feed(Protocol):
    """Where updates come from: a served frame, or a record that is played."""

    lost_updates: int

    def updates(self, timeout_s: float) -> Iterator[Update]:
        """What has come."""


class Desk(Protocol):
    """Where commands go."""

    def do(self, command: str, **words: Any) -> dict[str, Any]:
        """One command; raises Refused or MidspanError."""

    def sit(self, operator: str, *, instead: bool = False) -> None:
        """Take the operator's seat."""

    def look(self) -> dict[str, Any]:
        """Everything a late joiner needs."""


class NoDesk:
    """Where a replay's commands go: nowhere."""

    def do(self, command: str, **words: Any) -> dict[str, Any]:
        raise Refused(command, (NO_FRAME,))

    def sit(self, operator: str, *, instead: bool = False) -> None:
        raise Refused("sit", (NO_FRAME,))

    def look(self) -> dict[str, Any]:
        raise Refused("look", (NO_FRAME,))


@contextmanager
def no_desk() -> Iterator[NoDesk]:
    """For threads that ask no station."""
    yield NoDesk()


@dataclass(frozen=True, slots=True)
class Answer:
    """What came of an errand. missing: why it was refused; trouble: why it could not be carried at all."""

    name: str
    body: Mapping[str, Any] = field(default_factory=dict)
    missing: tuple[str, ...] = ()
    trouble: str = ""

    @property
    def good(self) -> bool:
        return not self.missing and not self.trouble


Work = Callable[[Desk], Mapping[str, Any] | None]


class Errands(threading.Thread):
    """Carries commands to the station one after the other."""

    def __init__(self, open_desk: Callable[[], AbstractContextManager[Desk]]) -> None:
        super().__init__(name="errands", daemon=True)
        self._open_desk = open_desk
        self._asked: queue.Queue[tuple[str, Work] | None] = queue.Queue(ERRANDS_MAX)
        self._answers: queue.Queue[Answer] = queue.Queue(ANSWERS_MAX)

    def ask(self, name: str, work: Work) -> bool:
        """False when too many are waiting already; nothing is asked then."""
        try:
            self._asked.put_nowait((name, work))
        except queue.Full:
            return False
        return True

    def do(self, command: str, **words: Any) -> bool:
        """A plain command by its name."""
        return self.ask(command, lambda desk: desk.do(command, **words))

    def answers(self) -> Iterator[Answer]:
        """What has come back; never waits."""
        yield from waiting(self._answers)

    def run(self) -> None:
        with self._open_desk() as desk:
            while True:
                asked = self._asked.get()
                if asked is None:
                    return
                put(self._answers, carry(asked[0], asked[1], desk))

    def end(self) -> None:
        """Ask it to go; one that waits for an answer goes with the process."""
        try:
            self._asked.put_nowait(None)
        except queue.Full:
            return


def carry(name: str, work: Work, desk: Desk) -> Answer:
    """One errand with its outcome as a value."""
    try:
        return Answer(name, work(desk) or {})
    except Refused as error:
        return Answer(name, missing=error.missing)
    except (MidspanError, OSError) as error:
        return Answer(name, trouble=str(error))


class StopLine(threading.Thread):
    """Sends STOP to the bench process's own socket; empty answers mean that the bytes have left."""

    def __init__(self, stop: Callable[[str], str]) -> None:
        super().__init__(name="stop line", daemon=True)
        self._stop_frame = stop
        self._asked: queue.Queue[str] = queue.Queue(ERRANDS_MAX)
        self._answers: queue.Queue[str] = queue.Queue(ANSWERS_MAX)

    def stop(self, who: str) -> None:
        """At once; one that finds the queue full has many before it."""
        put(self._asked, who)

    def answers(self) -> Iterator[str]:
        yield from waiting(self._answers)

    def run(self) -> None:
        while True:
            put(self._answers, self._stop_frame(self._asked.get()))


def waiting(items: queue.Queue[Item]) -> Iterator[Item]:
    """What lies in a queue now."""
    while True:
        try:
            yield items.get_nowait()
        except queue.Empty:
            return


def put(items: queue.Queue[Item], item: Item) -> None:
    """Never waits: what nobody takes is of no use any more."""
    try:
        items.put_nowait(item)
    except queue.Full:
        return
