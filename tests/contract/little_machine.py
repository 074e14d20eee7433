"""A little machine that speaks the wire, written without the project's encoders: rows, replies, a stop. For
tests."""

from __future__ import annotations

import os
import pty
import select
import socket
import struct
import threading
import time
import tty
from abc import ABC, abstractmethod


class LittleMachine(ABC):
    """Sends rows at about 1 kHz on whatever carries its bytes and hears what it is told; one thread, closed
    by close."""

    def __init__(self) -> None:
        self.heard = b""
        self.quiet = False
        self.deaf = False
        self._counter = 0
        self._done = threading.Event()
        self._thread = threading.Thread(target=self._live, daemon=True)

    def start(self) -> None:
        self._thread.start()

    def close(self) -> None:
        self._done.set()
        self._thread.join(5.0)
        self.lose()

    @abstractmethod
    def lose(self) -> None:
        """Pull the cable."""

    def _live(self) -> None:
        while not self._done.wait(0.005):
            if not self.deaf:
                self._hear()
            if not self.quiet:
                self._send(b"".join(self._row() for _ in range(5)))

    @abstractmethod
    def _row(self) -> bytes: ...

    @abstractmethod
    def _hear(self) -> None: ...

    @abstractmethod
    def _send(self, data: bytes) -> None: ...


class PtyMachine(LittleMachine):
    """Text lines with an exclusive-or check on a pseudo-terminal."""

    def __init__(self) -> None:
        super().__init__()
        self._master, slave = pty.openpty()
        tty.setraw(slave)
        os.set_blocking(self._master, False)
        self.port = os.ttyname(slave)
        self._slave = slave  # kept open, as a plugged adapter is there without a program

    def _row(self) -> bytes:
        self._counter = (self._counter + 1) % 65536
        row = f"D{self._counter},{self._counter % 50 - 25}".encode()
        check = 0
        for octet in row:
            check ^= octet
        return row + b",%02X\r\n" % check

    def _hear(self) -> None:
        try:
            while select.select([self._master], [], [], 0)[0]:
                self.heard += os.read(self._master, 4096)
        except OSError:
            self._done.set()

    def _send(self, data: bytes) -> None:
        try:
            os.write(self._master, data)
        except BlockingIOError:
            return  # nobody reads: the rows are lost, as they are on a real line
        except OSError:
            self._done.set()

    def lose(self) -> None:
        self._done.set()
        self._thread.join(5.0)
        for descriptor in (self._master, self._slave):
            try:
                os.close(descriptor)
            except OSError:
                continue


class TcpMachine(LittleMachine):
    """Binary packets without a check over TCP loopback; one client at a time, the newest."""

    def __init__(self) -> None:
        super().__init__()
        self._server = socket.create_server(("127.0.0.1", 0))
        self._server.setblocking(False)
        self.port = self._server.getsockname()[1]
        self._client: socket.socket | None = None

    def _row(self) -> bytes:
        self._counter += 1
        return b"\x7e\x81" + struct.pack(">Ih", self._counter, self._counter % 50 - 25)

    def _hear(self) -> None:
        try:
            client, _ = self._server.accept()
        except BlockingIOError:
            pass
        else:
            if self._client is not None:
                self._client.close()
            client.setblocking(False)
            self._client = client
        if self._client is not None:
            try:
                self.heard += self._client.recv(4096)
            except BlockingIOError:
                return
            except OSError:
                self._client = None

    def _send(self, data: bytes) -> None:
        if self._client is not None:
            try:
                self._client.send(data)
            except BlockingIOError:
                return
            except OSError:
                self._client = None

    def lose(self) -> None:
        self._done.set()
        self._thread.join(5.0)
        if self._client is not None:
            self._client.close()
        self._server.close()


def until(condition, patience_s: float = 5.0) -> bool:
    """Look until it is true; no fixed waiting."""
    deadline_s = time.monotonic() + patience_s
    while not condition():
        if time.monotonic() > deadline_s:
            return False
        time.sleep(0.001)
    return True
