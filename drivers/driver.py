"""Driver: one source of samples behind one small interface: a wire, a replay, a virtual machine.
check_driver in contract.py says what each of them must do. The bench process uses links and decoders
directly; this is for tools.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

from daq.cards.derived import channels_of
from daq.cards.frame import FrameCard
from daq.errors import LinkClosed, LinkLost, ProtocolViolation
from drivers.decoded import Decoded
from drivers.health import LinkFault, LinkHealth
from drivers.links import Link, open_link, wait_readable
from drivers.motion import MotionPort
from drivers.plan import link_of
from drivers.registry import decoder_for


@dataclass(frozen=True, slots=True)
class ChannelUnit:
    """One column of the blocks: its name and the unit after calibration."""

    name: str
    unit: str


class Driver(Protocol):
    """What check_driver checks. Channels are known before opening; counts come as blocks, in their order."""

    @property
    def channels(self) -> tuple[ChannelUnit, ...]: ...

    def open(self) -> None:
        """Open without moving anything. DriverOpenError with one clear line where it cannot be."""
        ...

    def read(self, timeout_s: float) -> Decoded | None:
        """What arrived within timeout_s; None = nothing. LinkLost when the world broke it, LinkClosed when
        closed."""
        ...

    def stop(self) -> None:
        """Ask the machine to stop; any number of times. Where there is no machine nothing happens."""
        ...

    def close(self) -> None:
        """Any number of times."""
        ...


class WireDriver:
    """One link of a frame card: port, decoder, and the stop command where the link carries motion."""

    def __init__(
        self, frame: FrameCard, link_number: int = 0, *, now_s: Callable[[], float] = time.monotonic
    ) -> None:
        self._frame = frame
        self._number = link_number
        self._card = link_of(frame, link_number)
        self._now_s = now_s
        self._decoder = decoder_for(frame, link_number)
        self._health = LinkHealth(self._card)
        self._motion = None
        if frame.motion is not None and frame.motion.link == self._card.name:
            self._motion = MotionPort(frame)
        self._link: Link | None = None

    @property
    def channels(self) -> tuple[ChannelUnit, ...]:
        return tuple(
            ChannelUnit(channel.name, channel.unit) for channel in channels_of(self._frame, self._number)
        )

    @property
    def sent_at_open(self) -> bytes:
        return b"" if self._link is None else self._link.sent_at_open

    def open(self) -> None:
        self._link = open_link(self._card)

    def read(self, timeout_s: float) -> Decoded | None:
        link = self._open_link()
        if not wait_readable(link, timeout_s):
            return None
        data = link.read()
        if data is None:
            return None
        now_s = self._now_s()
        decoded = self._decoder.feed(data, now_s)
        if LinkFault.GARBAGE in self._health.judge(decoded, now_s):
            raise ProtocolViolation(
                "nothing but garbage: speed, parity or dialect of the card do not fit the device",
                driver=self._card.name,
                device=link.device,
                discarded_bytes=decoded.discarded_bytes,
            )
        return decoded

    def stop(self) -> None:
        """Never waits: an output that does not take the whole command is a lost link, said at once."""
        link = self._open_link()
        if self._motion is None:
            return
        command = self._motion.encode_stop(self._now_s())
        if link.write(command) < len(command):
            why = "the output is full: the machine may not have heard STOP"
            raise LinkLost(why, driver=self._card.name, device=link.device)

    def close(self) -> None:
        if self._link is not None:
            self._link.close()

    def _open_link(self) -> Link:
        if self._link is None:
            raise LinkClosed("used before it was opened", driver=self._card.name, device="-")
        return self._link
