"""A client of one frame's station: commands with an answer each, updates as they come. Used by run, demo and watch.

A stop does not pass here: see daq.station.stopline, which goes straight to the bench process.
"""

from __future__ import annotations

import json
import time
from collections.abc import Iterator
from typing import Any

import zmq

from daq.errors import MidspanError, Refused
from daq.station.places import Places
from daq.stream.updates import Update, decode

ANSWER_TIMEOUT_MS = 5_000
SERIES_TIMEOUT_MS = 60_000  # every record of the series is read
UPDATES_HELD_MAX = 10_000
UPDATES_AT_ONCE_MAX = 2_000  # then the caller must get a look in, however fast more come


class Client:
    """Talks to the station of one frame. `seat` is kept here after `sit`."""

    def __init__(self, places: Places) -> None:
        self._places = places
        self._context = zmq.Context()
        self._control = self._context.socket(zmq.REQ)
        self._control.set(zmq.LINGER, 0)
        self._control.set(zmq.REQ_RELAXED, 1)
        self._control.set(zmq.REQ_CORRELATE, 1)
        self._control.connect(places.control_address)
        self._feed = self._context.socket(zmq.SUB)
        self._feed.set(zmq.RCVHWM, UPDATES_HELD_MAX)
        self._feed.set(zmq.LINGER, 0)
        self._feed.connect(places.feed_address)
        self._feed.subscribe(b"")
        self._seat = ""
        self._last_number: int | None = None
        self.lost_updates = 0

    def __enter__(self) -> Client:
        return self

    def __exit__(self, *_: object) -> None:
        self._context.destroy(linger=0)

    def do(self, command: str, **words: Any) -> dict[str, Any]:
        """One command. Raises Refused with the missing conditions, MidspanError when the station does not answer."""
        message = {"do": command, "seat": self._seat, "at_ns": time.monotonic_ns(), **words}
        self._control.send(json.dumps(message).encode())
        if not self._control.poll(SERIES_TIMEOUT_MS if command == "series" else ANSWER_TIMEOUT_MS):
            raise MidspanError(
                f"the station of frame {self._places.frame} does not answer; is `midspan serve` running?"
            )
        answer: dict[str, Any] = json.loads(self._control.recv())
        if not answer["ok"]:
            raise Refused(answer["refused"] or command, tuple(answer["missing"]))
        return answer

    def sit(self, operator: str, *, instead: bool = False) -> None:
        """Take the operator's seat."""
        self._seat = str(self.do("sit", operator=operator, instead=instead)["seat"])

    def rise(self) -> None:
        self.do("rise")
        self._seat = ""

    def look(self) -> dict[str, Any]:
        """Everything a late joiner needs."""
        look: dict[str, Any] = self.do("look")["look"]
        return look

    def updates(self, timeout_s: float) -> Iterator[Update]:
        """What has come, waiting at most timeout_s for the first. Lost updates are counted in `lost_updates`."""
        wait_ms = int(timeout_s * 1000)
        for _ in range(UPDATES_AT_ONCE_MAX):
            if not self._feed.poll(wait_ms):
                return
            wait_ms = 0
            update = decode(self._feed.recv_multipart())
            if self._last_number is not None and update.number > self._last_number + 1:
                self.lost_updates += update.number - self._last_number - 1
            self._last_number = update.number
            yield update
