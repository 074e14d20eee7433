"""Entry of the recorder, archivist and station processes: joins the rooms that may not import each other.

The archivist gets the reduction handed in here, since daq.record knows nothing of daq.results.
"""

from __future__ import annotations

import json
import signal
import socket
import sys
import time
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from daq.errors import MidspanError
from daq.station.places import Places
from daq.stream.ring import RingAbsent, RingReader

ALIVE_S = 0.5
NOT_DRAINED_CODE = 7  # the recorder's: the ring still holds what no journal does
LINE_BYTES_MAX = 1_500


class Life:
    """Our end of the supervisor's pipe: end of file or "end" means finish; a dot now and then says we are alive."""

    def __init__(self, descriptor: int) -> None:
        self._pipe = socket.socket(fileno=descriptor)
        self._pipe.setblocking(False)
        self._said_s = 0.0
        self._over = False
        self.orderly = False  # the supervisor said "end"; everybody before us in the order has ended

    def ready(self) -> None:
        self._pipe.send(b"ready")

    def tell(self, text: str) -> None:
        """Something a person at the daemon should read."""
        self._say(b"tell " + text.encode()[:LINE_BYTES_MAX])

    def failed(self, text: str) -> None:
        """Why this process ends, in one line."""
        self._say(b"failed " + text.encode()[:LINE_BYTES_MAX])

    def over(self) -> bool:
        """Whether to finish; says that we are alive."""
        now_s = time.monotonic()
        if now_s - self._said_s > ALIVE_S:
            self._said_s = now_s
            self._say(b".")
        try:
            word = self._pipe.recv(64)
            self.orderly |= word == b"end"
            self._over |= word in (b"", b"end")
        except BlockingIOError:
            pass
        except OSError:
            self._over = True
        return self._over

    def _say(self, word: bytes) -> None:
        try:
            self._pipe.send(word)
        except OSError:
            pass  # a supervisor that has gone is seen by its end of file


class Reporter:
    """Datagrams to the station; lost when it is away, since everything true is on disk."""

    def __init__(self, role: str, station_socket: Path) -> None:
        self._role = role
        self._path = str(station_socket)
        self._socket = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_NONBLOCK)

    def __call__(self, report: Mapping[str, Any]) -> None:
        try:
            self._socket.sendto(json.dumps({"from": self._role, **report}).encode(), self._path)
        except OSError:
            pass  # no station just now


def places_of(config: Mapping[str, Any]) -> Places:
    stored = config["places"]
    return Places(stored["frame"], Path(stored["runtime"]), Path(stored["data"]))


def await_until(test: Callable[[], bool], life: Life) -> bool:
    """Wait for what another process makes; False when told to end first."""
    while not test():
        if life.over():
            return False
        time.sleep(0.005)
    return True


def ring_is_ready(path: Path) -> bool:
    """The bench has made the ring and filled in its header."""
    try:
        RingReader(path).close()
    except RingAbsent:
        return False
    return True


def recorder(config: Mapping[str, Any], life: Life) -> int:
    from daq.record.recorder import run_recorder

    places = places_of(config)
    ring = Path(config["ring_path"])
    life.ready()
    if await_until(lambda: ring_is_ready(ring), life):
        report = Reporter("recorder", places.station_socket)
        left = run_recorder(
            ring,
            places.journal(config["stream_id"]),
            report,
            life.over,
            bytes_ahead=int(config["bytes_ahead"]),
        )
        if left:
            life.failed(left)
            return NOT_DRAINED_CODE
    return 0


def archivist(config: Mapping[str, Any], life: Life) -> int:
    from daq.record.archivist import run_archivist
    from daq.record.recorder import unsafe_bytes
    from daq.record.recover import recover
    from daq.results.reduce import result_mapping
    from daq.station.leftovers import clear_leftovers

    places = places_of(config)
    ring = Path(config["ring_path"])
    report = Reporter("archivist", places.station_socket)
    journal = places.journal(config["stream_id"])
    copy_to = Path(config["copy_to"]) if config.get("copy_to") else None

    life.ready()
    clear_leftovers(places, config["stream_id"], result_mapping, report, life.tell, life.over)
    if await_until(journal.is_dir, life):
        run_archivist(journal, places.data, places.spool, result_mapping, report, life.over, copy_to)
        if life.orderly and not unsafe_bytes(
            ring
        ):  # the recorder has ended before us and left nothing: clear up
            recover(journal, places.data, reduce=result_mapping, report=report)
    return 0


def station(config: Mapping[str, Any], life: Life) -> int:
    from daq.station.station import run_station

    return run_station(config, places_of(config), life)


ROLES = {"recorder": recorder, "archivist": archivist, "station": station}


def main(role: str, config_path: str, words: str) -> int:
    """Run one role until the life pipe ends."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    config = json.loads(Path(config_path).read_text(encoding="utf-8"))
    life = Life(json.loads(words)["life_fd"])
    try:
        return ROLES[role](config, life)
    except MidspanError as error:
        life.failed(str(error))
        return 4


if __name__ == "__main__":
    sys.exit(main(*sys.argv[1:4]))
