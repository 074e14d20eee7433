"""VirtualWire: the machine behind its cable, on virtual time. Bytes in, timed bytes out; no ports.

The same object serves scenarios (as fast as it goes) and the real wire (wire.py gives real time). Bytes take
the time that the declared speed needs, both ways; what a full line cannot carry is dropped and counted.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from daq.cards.frame import FrameCard, Link
from drivers.plan import transmission_s
from drivers.registry import encoder_for
from simulator.card import SimulatorCard
from simulator.commands import Ear, Verb
from simulator.controller import INPUTS
from simulator.faults import Rows, WireFault
from simulator.machine import Machine
from simulator.sampling import SampleRows
from simulator.specimen import InHand

AHEAD_S = 0.1  # rows are made this far ahead while nothing happens; a command takes them back
BACKLOG_BYTES_MAX = 4096  # what a device keeps when its line is too slow; more is lost as in a real one
ASKING = frozenset({Verb.STATUS, Verb.KEEP_ALIVE})  # answered out of any quiet stretch
HEARD_MAX = 10_000  # bytes on their way to the machine, in pieces; a host that floods loses them


@dataclass(slots=True)
class _Trouble:
    """A fault of the cable. rows_left: for faults counted in rows."""

    kind: str
    from_s: float
    until_s: float
    rows_left: int


class _Line:
    """One link: its encoder, its outgoing bytes and its troubles."""

    def __init__(self, frame: FrameCard, card: SimulatorCard, number: int) -> None:
        self.link: Link = frame.links[number]
        self.ear = Ear(frame, number)
        self.encoder = encoder_for(frame, number)
        self.streaming = not self.link.start_command
        self.waiting: deque[tuple[float, bytes]] = deque()
        self._ahead: deque[tuple[float, bytes]] = (
            deque()
        )  # rows made ahead of time, by the time of their sample
        self.troubles: list[_Trouble] = []
        self._row_s = 0.0  # time of the last row on the line
        self._byte_s = transmission_s(self.link, 1)
        self.rows_made = self.rows_sent = self.rows_overrun = 0
        self._end = (self.link.lines.line_end if self.link.lines else "").encode("latin-1")
        self._free_s = 0.0
        self._batch_s = card.electronics.batch_s
        self._garble = np.random.default_rng((card.seed, number, 99))

    def through_s(self, now_s: float, data: bytes) -> float:
        """When bytes that the host sends now are through."""
        return now_s + len(data) * self._byte_s

    def connected(self, now_s: float) -> bool:
        return not any(t.kind == "reconnect" and t.from_s < now_s <= t.until_s for t in self.troubles)

    def put(self, ready_s: float, data: bytes) -> bool:
        """Queue bytes; False when the line is too far behind."""
        if self.troubles and not self.connected(ready_s):
            return False
        if self._batch_s:
            ready_s = math.ceil(ready_s / self._batch_s) * self._batch_s
        begin_s = max(ready_s, self._free_s)
        if begin_s - ready_s > BACKLOG_BYTES_MAX * self._byte_s:
            return False
        self._free_s = begin_s + len(data) * self._byte_s
        self.waiting.append((self._free_s, data))
        return True

    def make(self, rows: SampleRows) -> None:
        """Encode rows; they leave when their time has come."""
        self._ahead.extend(zip(rows.time_s.tolist(), self._encoded(rows), strict=True))

    def take_back(self, rows: int) -> None:
        """The newest rows were made for a time that comes otherwise."""
        for _ in range(rows):
            self._ahead.pop()

    def pass_time(self, until_s: float) -> None:
        """Rows of samples up to this moment leave."""
        while self._ahead and self._ahead[0][0] <= until_s:
            time_s, data = self._ahead.popleft()
            self.rows_made += 1
            self._row_s = len(data) * self._byte_s
            if not self.streaming:
                continue
            for piece in self._troubled(time_s, data) if self.troubles else (data,):
                if self.put(time_s, piece):
                    self.rows_sent += 1
                else:
                    self.rows_overrun += 1

    def next_s(self, next_sample_s: float) -> float:
        """When the next bytes will have arrived at the host."""
        if self.waiting:
            return self.waiting[0][0]
        return (self._ahead[0][0] if self._ahead else next_sample_s) + self._row_s

    def take(self, until_s: float) -> list[tuple[float, bytes]]:
        out = []
        while self.waiting and self.waiting[0][0] <= until_s:
            out.append(self.waiting.popleft())
        return out

    def _encoded(self, rows: SampleRows) -> Iterator[bytes]:
        """One piece of bytes a row."""
        cuts = [0, *(np.flatnonzero(np.diff(rows.inputs)) + 1).tolist(), rows.count]
        for begin, end in pairwise(cuts):
            bits = int(rows.inputs[begin])
            data = self.encoder.encode(
                rows.counts[begin:end],
                first_counter=rows.first_counter + begin,
                time_s=rows.time_s[begin:end],
                inputs={name: bool(bits >> bit & 1) for bit, name in enumerate(INPUTS)},
            )
            if self._end:
                yield from (line + self._end for line in data.split(self._end)[:-1])
            else:
                size = len(data) // (end - begin)
                yield from (data[at : at + size] for at in range(0, len(data), size))

    def _troubled(self, time_s: float, data: bytes) -> tuple[bytes, ...]:
        self.troubles = [t for t in self.troubles if t.until_s >= time_s and t.rows_left != 0]
        copies = 1
        for trouble in self.troubles:
            if trouble.from_s >= time_s:
                continue
            trouble.rows_left -= 1
            if trouble.kind in ("dropped", "stream-end"):
                return ()
            if trouble.kind == "garbage":
                data = self._garble.bytes(len(data))
            copies += trouble.kind == "duplicated"
        return (data,) * copies


class VirtualWire:
    """All links of one virtual machine. Write and read in the order of time."""

    def __init__(self, frame: FrameCard, card: SimulatorCard, first: InHand | None = None) -> None:
        self.machine = Machine(frame, card, first)
        self._lines = [_Line(frame, card, number) for number in range(len(frame.links))]
        names = [link.name for link in frame.links]
        self._motion_link = names.index(frame.motion.link) if frame.motion is not None else 0
        self._heard: deque[tuple[float, int, bytes]] = deque()
        self.bytes_lost = 0
        self.now_s = 0.0

    def write(self, data: bytes, now_s: float, link: int | None = None) -> None:
        """The host sends; the machine hears it when the last byte is through. link None: the motion link."""
        number = self._motion_link if link is None else link
        line = self._lines[number]
        if not line.connected(now_s) or len(self._heard) >= HEARD_MAX:
            self.bytes_lost += len(data)
            return
        heard_s = max(line.through_s(now_s, data), self._heard[-1][0] if self._heard else 0.0)
        self._heard.append((heard_s, number, data))

    def run_to(self, until_s: float) -> None:
        """Let time pass."""
        while self._heard and self._heard[0][0] <= until_s:
            heard_s, number, data = self._heard.popleft()
            self._hear(max(heard_s, self.now_s), number, data)
        if until_s >= self.machine.now_s:
            self.machine.run_to(until_s)
            if until_s - self.now_s < AHEAD_S / 2:  # a host that reads in larger steps gains nothing
                quiet_s = math.nextafter(self.machine.quiet_until_s(), 0.0)
                self.machine.run_to(max(min(until_s + AHEAD_S, quiet_s), until_s))
            self._collect()
        self._pass_time(until_s)

    def settle(self, now_s: float) -> None:
        """Bring the machine to exactly this moment, so that something may be done to it."""
        if now_s < self.machine.now_s:
            for line, rows in zip(self._lines, self.machine.rewind(now_s), strict=True):
                line.take_back(rows)
        self.machine.run_to(now_s)
        self._collect()
        self._pass_time(now_s)

    def read(self, until_s: float, link: int = 0) -> list[tuple[float, bytes]]:
        """What arrived at the host up to this moment: (arrival_s, bytes), a row or a reply each."""
        self.run_to(until_s)
        return self._lines[link].take(until_s)

    def next_s(self) -> float:
        """The next moment worth looking: a row, a reply, or a command coming through."""
        moments = [line.next_s(self.machine.next_sample_s(number)) for number, line in enumerate(self._lines)]
        if self._heard:
            moments.append(self._heard[0][0])
        return min(moments)

    def connected(self, link: int = 0) -> bool:
        """False while the port of this link does not exist."""
        return self._lines[link].connected(self.now_s)

    def clear(self) -> None:
        """All misfortunes end."""
        self.machine.clear()
        for line in self._lines:
            line.troubles.clear()

    def counts(self) -> dict[str, int]:
        """Rows made, sent, and lost because the line could not carry them, over all links."""
        return {
            name: sum(getattr(line, name) for line in self._lines)
            for name in ("rows_made", "rows_sent", "rows_overrun")
        }

    def _hear(self, now_s: float, number: int, data: bytes) -> None:
        line = self._lines[number]
        commands = line.ear.feed(data)
        if now_s <= self.machine.now_s and all(heard.verb in ASKING for heard in commands):
            self._pass_time(now_s)  # nothing changes: the rows made ahead stay good
        else:
            self.settle(now_s)
        for heard in commands:
            reply = self.machine.command(heard, now_s)
            if heard.verb is Verb.STREAM:
                line.streaming = True
            if reply is not None:
                line.put(now_s, line.encoder.reply(reply.encode("latin-1")))

    def _collect(self) -> None:
        faults, self.machine.wire_faults = self.machine.wire_faults, []
        for from_s, fault in faults:
            for line in self._lines:
                if fault.link in (None, line.link.name):
                    line.troubles.append(_trouble(fault, from_s))
        for rows in self.machine.take_rows():
            self._lines[rows.link].make(rows)

    def _pass_time(self, now_s: float) -> None:
        self.now_s = max(self.now_s, now_s)
        for line in self._lines:
            line.pass_time(now_s)


def _trouble(fault: Rows | WireFault, from_s: float) -> _Trouble:
    until_s = math.inf if fault.for_s is None else from_s + fault.for_s
    return _Trouble(fault.kind, from_s, until_s, fault.rows if isinstance(fault, Rows) else -1)
