"""Port: one link while it lives and while it is away, and the account of what was to be sent on it and never left.

It opens a lost link again without ever waiting: a serial port opens at once, a TCP connection is begun and looked at
once a tick. What is sent when, and what a loss means, is decided elsewhere.
"""

from __future__ import annotations

import os
from dataclasses import dataclass, field

from daq.errors import DriverError
from daq.watch.values import Json
from drivers.links import CONNECT_S, Connecting, Link, TcpLink, open_link

PSEUDO_TERMINALS = "/dev/pts/"
REOPEN_NS = 1_000_000_000
CONNECT_NS = round(CONNECT_S * 1e9)
TOLD_MAX = 8  # different commands told one by one while a link is away; the rest is counted
SHOWN_BYTES = 64


@dataclass(slots=True)
class Unsent:
    """What never left since the link was lost. Told one by one at first, then counted."""

    writes: int = 0
    size: int = 0
    told: set[bytes] = field(default_factory=set)

    def add(self, data: bytes) -> dict[str, Json] | None:
        """What to tell of this command; None where it is only counted."""
        self.writes, self.size = self.writes + 1, self.size + len(data)
        if data in self.told or len(self.told) >= TOLD_MAX:
            return None
        self.told.add(data)
        return {"writes": 1, "bytes": len(data), "data": data[:SHOWN_BYTES].decode("latin-1")}


@dataclass(slots=True)
class Port:
    """pending: command bytes that the full output has not taken yet."""

    link: Link
    pending: bytearray = field(default_factory=bytearray)
    lost: bool = False
    reopen_ns: int = 0
    give_up_ns: int = 0
    connecting: Connecting | None = None
    unsent: Unsent = field(default_factory=Unsent)
    pseudo: bool = field(init=False)

    def __post_init__(self) -> None:
        self.pseudo = os.path.realpath(self.link.device).startswith(PSEUDO_TERMINALS)

    def sum_unsent(self) -> dict[str, Json] | None:
        """Begin a new account; what of the old one has not been told yet."""
        unsent, self.unsent = self.unsent, Unsent()
        if unsent.writes <= len(unsent.told):
            return None
        return {"writes": unsent.writes, "bytes": unsent.size, "data": None}

    def lose(self, now_ns: int) -> bytes:
        """Close it; what still waited to leave."""
        self.lost, self.reopen_ns = True, now_ns + REOPEN_NS
        self.link.close()
        waited = bytes(self.pending)
        self.pending.clear()
        return waited

    def open_again(self, now_ns: int) -> bool:
        """One step towards an open link; never waits. True once it is open."""
        try:
            link = self._step(now_ns)
        except DriverError:
            link = None
            self.give_up()
        if link is None:
            return False
        self.link, self.connecting, self.lost = link, None, False
        return True

    def give_up(self) -> None:
        """No attempt is under way any more."""
        if self.connecting is not None:
            self.connecting.close()
            self.connecting = None

    def _step(self, now_ns: int) -> Link | None:
        """Raises DriverError where it is still away; tried again a second after the last try began."""
        if self.connecting is not None:
            if now_ns > self.give_up_ns:
                self.give_up()
                return None
            return self.connecting.link()
        if now_ns < self.reopen_ns:
            return None
        self.reopen_ns, self.give_up_ns = now_ns + REOPEN_NS, now_ns + CONNECT_NS
        if not isinstance(self.link, TcpLink):
            return open_link(self.link.card)
        self.connecting = Connecting(self.link)
        return self.connecting.link()
