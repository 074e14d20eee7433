"""Ports of the virtual machine: a pseudo-terminal or a TCP server on loopback. Shell: bytes only, no rows.

A port never waits. What nobody reads is dropped by whole pieces and counted: a machine goes on regardless.
"""

from __future__ import annotations

import contextlib
import hashlib
import ipaddress
import os
import pty
import socket
import termios
import tty
from pathlib import Path
from typing import Protocol

from daq.cards.frame import Link
from daq.errors import DriverOpenError

READ_BYTES_MAX = 4096
GARBLED = bytes(
    (byte * 167 + 91) & 0xFF for byte in range(256)
)  # what a reader at another speed makes of a byte


class Port(Protocol):
    """One end of a link. `dropped_bytes`: what nobody took."""

    dropped_bytes: int

    def fds(self) -> tuple[int, ...]: ...

    def read(self) -> bytes: ...

    def write(self, data: bytes) -> None: ...

    def vanish(self) -> None: ...

    def appear(self) -> None: ...

    def close(self) -> None: ...

    @property
    def title(self) -> str: ...


class PtyPort:
    """A pseudo-terminal; `path` becomes a symbolic link to its slave.

    The slave stays open here so that a reader may come and go. A pseudo-terminal has no speed of its own: a
    reader that has set another speed than the card declares gets garbage, as on a real line.
    """

    def __init__(self, link: Link, path: Path | None) -> None:
        self._link = link
        self._path = path
        self._named = False  # whether what stands under the name is ours
        self._claim = _claim(path, link.name) if path is not None else None
        self._speed = getattr(termios, f"B{link.speed_baud}", None)
        self._master = self._slave = -1
        self._left = b""
        self.dropped_bytes = 0
        try:
            self.appear()
        except (OSError, DriverOpenError):
            self.close()
            raise

    @property
    def title(self) -> str:
        slave = os.ttyname(self._slave)
        return f"{self._path} -> {slave}" if self._path is not None else slave

    def fds(self) -> tuple[int, ...]:
        return (self._master,) if self._master >= 0 else ()

    def appear(self) -> None:
        """Plugged in."""
        if self._master >= 0:
            return
        self._master, self._slave = pty.openpty()
        tty.setraw(self._slave)
        os.set_blocking(self._master, False)
        if self._path is not None:
            _point(self._path, os.ttyname(self._slave), self._link.name)
            self._named = True

    def vanish(self) -> None:
        """Unplugged: readers see the line hang up, and the name is gone."""
        if self._master < 0:
            return
        if self._path is not None and self._named:
            self._named = False
            with contextlib.suppress(OSError):
                self._path.unlink()
        os.close(self._master)
        os.close(self._slave)
        self._master = self._slave = -1
        self._left = b""

    def close(self) -> None:
        self.vanish()
        if self._claim is not None:
            self._claim.close()

    def read(self) -> bytes:
        try:
            data = os.read(self._master, READ_BYTES_MAX)
        except OSError:
            return b""
        return data if self._same_speed() else data.translate(GARBLED)

    def write(self, data: bytes) -> None:
        if self._master < 0 or not (data or self._left):
            return
        if not self._same_speed():
            data = data.translate(GARBLED)
        if self._left:
            self._left = self._send(self._left)
        if self._left:
            self.dropped_bytes += len(data)
        else:
            self._left = self._send(data)

    def _send(self, data: bytes) -> bytes:
        try:
            return data[os.write(self._master, data) :]
        except BlockingIOError:
            return data

    def _same_speed(self) -> bool:
        return self._speed is None or termios.tcgetattr(self._slave)[5] == self._speed


class TcpPort:
    """A TCP server on loopback with one client at a time; a second one is turned away."""

    def __init__(self, link: Link) -> None:
        self._link = link
        self._address = (link.host or "127.0.0.1", link.tcp_port or 0)
        self._listener: socket.socket | None = None
        self._client: socket.socket | None = None
        self._left = b""
        self.dropped_bytes = 0
        self.appear()

    @property
    def title(self) -> str:
        assert self._listener is not None
        host, port = self._listener.getsockname()[:2]
        return f"{host}:{port}"

    def fds(self) -> tuple[int, ...]:
        return tuple(part.fileno() for part in (self._listener, self._client) if part is not None)

    def appear(self) -> None:
        if self._listener is not None:
            return
        if not ipaddress.ip_address(self._address[0]).is_loopback:
            raise DriverOpenError(
                "a virtual machine listens on loopback only", driver="simulator", device=self._address[0]
            )
        self._listener = socket.create_server(self._address, backlog=1)
        self._listener.setblocking(False)

    def vanish(self) -> None:
        for part in (self._client, self._listener):
            if part is not None:
                part.close()
        self._client = self._listener = None
        self._left = b""

    close = vanish

    def read(self) -> bytes:
        data = (
            self._receive()
        )  # first: a client that has gone makes room for one that comes in the same round
        self._accept()
        return data

    def _receive(self) -> bytes:
        if self._client is None:
            return b""
        try:
            data = self._client.recv(READ_BYTES_MAX)
        except BlockingIOError:
            return b""
        except OSError:
            data = b""
        if not data:
            self._client.close()
            self._client, self._left = None, b""
        return data

    def write(self, data: bytes) -> None:
        if self._client is None or not (data or self._left):
            return
        if self._left:
            self._left = self._send(self._left)
        if self._left:
            self.dropped_bytes += len(data)
        else:
            self._left = self._send(data)

    def _accept(self) -> None:
        assert self._listener is not None
        try:
            client, _ = self._listener.accept()
        except OSError:
            return
        if self._client is not None:
            client.close()
            return
        client.setblocking(False)
        client.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self._client = client

    def _send(self, data: bytes) -> bytes:
        assert self._client is not None
        try:
            return data[self._client.send(data) :]
        except BlockingIOError:
            return data
        except OSError:
            return b""


def open_port(link: Link, folder: Path) -> Port:
    """The port that the frame card's link names, on this side of the cable."""
    try:
        if link.kind == "tcp":
            return TcpPort(link)
        return PtyPort(link, folder / link.port if link.port is not None else None)
    except OSError as error:
        device = link.port or f"{link.host}:{link.tcp_port}"
        raise DriverOpenError(
            f"{os.strerror(error.errno) if error.errno else error}: is another simulation running?",
            driver="simulator",
            device=device,
        ) from error


def _claim(path: Path, link: str) -> socket.socket:
    """The name is ours until we end, however that happens: an abstract socket, which leaves nothing behind.

    Without it a second simulation would quietly turn the name from the first one, whose reader goes on with a machine
    that nobody else sees.
    """
    name = hashlib.sha256(os.fsencode(path.parent.resolve() / path.name)).hexdigest()
    claim = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
    try:
        claim.bind(f"\0midspan simulate {name}")
    except OSError as error:
        claim.close()
        raise DriverOpenError(
            "another simulation is running under this name; end that one first, or run in another folder",
            driver=f"simulator link {link}",
            device=str(path),
        ) from error
    return claim


def _point(path: Path, target: str, link: str) -> None:
    """A symbolic link at path, in place of an older one; never in place of anything else."""
    if path.exists() and not path.is_symlink():
        raise DriverOpenError(
            "there is something else under this name; remove it or run in another folder",
            driver=f"simulator link {link}",
            device=str(path),
        )
    new = path.with_name(path.name + ".new")
    with contextlib.suppress(FileNotFoundError):
        new.unlink()
    new.symlink_to(target)
    new.replace(path)
