"""The station's line to the bench process: requests with an answer each, and the heartbeat that carries a snapshot.

It asks; what is done, the bench decides. A bench that does not answer is a refusal, never a wait without end.
"""

from __future__ import annotations

import asyncio
import json
import os
import socket
import time
from pathlib import Path
from typing import Any

from daq.bench import messages
from daq.errors import Refused
from daq.station.places import Places
from daq.watch.requests import Request

ANSWER_TIMEOUT_S = 1.0
SILENT_S = 1.0  # the snapshot is not current any more
COMMAND_OF = {
    "StopRequest": "stop",
    "OpenRun": "mount",
    "StartRun": "start",
    "CloseRun": "close",
    "Jog": "jog",
    "ReturnCrosshead": "back off",
    "Reset": "reset",
    "Note": "note",
    "TightenLimit": "tighten",
    "Prove": "prove",
    "CheckCell": "check cell",
    "TakeSeat": "sit",
    "TellFault": "room",
    "FaultOver": "room",
}


class BenchLine:
    """Requests to the bench process and its answers, over datagrams."""

    def __init__(self, places: Places) -> None:
        self._address = str(places.bench_socket)
        self._own = str(places.requests_socket(os.getpid()))
        self._socket = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_NONBLOCK)
        self._socket.bind(self._own)
        self.snapshot: dict[str, Any] = {}
        self._heard_s = time.monotonic()
        self._number = 0
        self._waiting: dict[int, asyncio.Future[dict[str, Any]]] = {}
        asyncio.get_running_loop().add_reader(self._socket.fileno(), self._hear)

    async def ask(self, request: Request) -> None:
        """Raises Refused with what the bench said."""
        answer = await self._send(messages.encode_request(self._next(), request, time.monotonic_ns()))
        if not answer.get("ok"):
            raise Refused(COMMAND_OF[type(request).__name__], tuple(answer.get("missing", ())))

    def beat(self) -> None:
        """Our heartbeat, and a question for the watch's present values; waits for nothing."""
        try:
            self._socket.sendto(messages.encode_snapshot_request(self._next()), self._address)
        except OSError:
            return  # no bench, or its queue is full; the age of `snapshot` tells

    @property
    def silent_s(self) -> float:
        """Since the bench last answered."""
        return time.monotonic() - self._heard_s

    def close(self) -> None:
        asyncio.get_running_loop().remove_reader(self._socket.fileno())
        self._socket.close()
        Path(self._own).unlink(missing_ok=True)

    def _next(self) -> int:
        self._number += 1
        return self._number

    async def _send(self, message: bytes) -> dict[str, Any]:
        number = self._number
        future: asyncio.Future[dict[str, Any]] = asyncio.get_running_loop().create_future()
        self._waiting[number] = future
        try:
            self._socket.sendto(message, self._address)
            return await asyncio.wait_for(future, ANSWER_TIMEOUT_S)
        except (OSError, TimeoutError) as error:
            raise Refused("bench", ("the bench process does not answer",)) from error
        finally:
            self._waiting.pop(number, None)

    def _hear(self) -> None:
        while True:
            try:
                message = self._socket.recv(messages.MESSAGE_BYTES_MAX)
            except BlockingIOError:
                return
            answer = json.loads(message)
            self._heard_s = time.monotonic()
            self.snapshot = answer.get("snapshot", self.snapshot)
            future = self._waiting.get(answer.get("id", -1))
            if future is not None and not future.done():
                future.set_result(answer)
