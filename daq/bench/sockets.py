"""The bench process's datagram sockets. Nothing here waits."""

from __future__ import annotations

import json
import os
import socket
from collections.abc import Mapping
from typing import Any

from daq.bench import messages


def bind(path: str) -> socket.socket:
    server = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_NONBLOCK)
    server.bind(path)
    os.chmod(path, 0o600)
    return server


def receive(server: socket.socket) -> tuple[bytes, Any]:
    try:
        return server.recvfrom(messages.MESSAGE_BYTES_MAX)
    except BlockingIOError:
        return b"", None


def reply(server: socket.socket, address: Any, answer: Mapping[str, Any]) -> None:
    """Answers are a courtesy: a client that has gone or does not read must not hold the bench."""
    if address:
        try:
            server.sendto(json.dumps(answer, separators=(",", ":")).encode(), socket.MSG_DONTWAIT, address)
        except OSError:
            pass
