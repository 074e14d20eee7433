"""Fixed binary packets with text replies between them: the decoder, and the encoder that is its inverse.
Pure.

A packet is believed at once where the one before it ended, or where a strong check (16 or 32 bit) proves
it. After garbage, under a weak check, it is believed only when another packet or a reply begins right
behind it. So the first packet under a weak check comes out one packet late, once.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from enum import Enum, auto

import numpy as np

from daq.cards.frame import FrameCard
from daq.errors import CardError
from daq.stream.block import Block, Floats
from daq.stream.clock import ClockModel
from drivers.checks import WEAK
from drivers.decoded import STALE_S, Decoded, PlainReads, Reason
from drivers.numbering import Numbering
from drivers.packetform import PacketForm
from drivers.plan import link_of, transmission_s
from drivers.sorting import Sorting, decoded_block
from drivers.timing import timing_for

REPLY_BYTES_MAX = 256
PACKETS_SCALAR_ROWS = 16
"""Up to this many packets a run is read one by one; above it numpy wins (measured, 14 byte packets with a
CRC)."""
RUN_PACKETS = 256
"""Packets tried at once by numpy; doubled while all are good, so that damage costs no more than it spoils."""
WINDOW_MAX = 16_384

_TEXT = re.compile(rb"[\x20-\x7e\t]*")


class _Turn(Enum):
    """What the bytes at one place ask for."""

    ON = auto()  # something was taken or thrown away: look again
    WAIT = auto()  # more bytes are needed


class PacketsDecoder:
    """One link's packets -> blocks, replies, inputs."""

    def __init__(self, frame: FrameCard, link_number: int, *, scalar_rows: int = PACKETS_SCALAR_ROWS) -> None:
        link = link_of(frame, link_number)
        form = PacketForm(frame, link_number)
        self._form = form
        self._sync = form.sync
        self._reply_sync = bytes.fromhex(form.dialect.reply_sync or "")
        self._reply_end = form.dialect.reply_line_end.encode("ascii", "replace") or b"\n"
        if self._reply_sync and (
            self._reply_sync.startswith(self._sync) or self._sync.startswith(self._reply_sync)
        ):
            raise CardError((f"link {link.name}: sync and reply_sync begin alike: choose different ones",))
        self._sync_bytes_max = max(len(self._sync), len(self._reply_sync))
        self._next = [-1, -1] if self._reply_sync else [-1]
        self._needs_follower = form.check in WEAK
        self._numbering = Numbering(
            form.plan, timing_for(form.plan, link), source=link_number, rate_hz=link.rate_hz
        )
        self._transmission_s = transmission_s(link, form.bytes)
        self._scalar_rows = scalar_rows
        self._window = RUN_PACKETS
        self._data = b""
        self._at = 0
        self._locked = False
        self._broken = False
        self._fresh_from_s: float | None = None

    @property
    def buffered_bytes(self) -> int:
        return len(self._data)

    @property
    def clock(self) -> ClockModel | None:
        """Drift and jitter of the device's counter, where it has one."""
        return self._numbering.clock

    def peek(self, data: bytes, ahead: int) -> list[tuple[float, ...]] | None:
        """See Peeks."""
        form = self._form
        rows: list[tuple[float, ...]] = []
        if self._data or not self._locked or self._broken or len(data) % form.bytes:
            return None
        for at in range(0, len(data), form.bytes):
            if not data.startswith(self._sync, at) or not form.passes(data, at):
                return None
            row = form.row(data, at)
            if not self._numbering.follows(row, ahead + len(rows)):
                return None
            rows.append(row)
        return rows

    def feed(self, data: bytes, arrival_s: float) -> Decoded:
        """Decode what arrived at arrival_s; never raises on bytes."""
        if self._fresh_from_s is None:
            self._fresh_from_s = arrival_s + STALE_S
        if self._data:
            data = self._data + data
        block = self._plain_packet(data, arrival_s)
        if block is not None:
            self._data = b""
            return decoded_block(block, arrival_s, self._fresh_from_s)
        self._data, self._at = data, 0
        self._next = [-1] * len(self._next)
        sorting = Sorting(self._broken)
        while self._at < len(self._data):
            if self._locked:
                self._take_run(sorting)
            if self._take_one(sorting) is _Turn.WAIT:
                break
        self._data = self._data[self._at :]
        self._broken = sorting.broken
        return sorting.decoded(self._numbering, arrival_s, self._transmission_s, self._fresh_from_s)

    def feed_many(
        self, pieces: Sequence[bytes], arrivals_s: Sequence[float]
    ) -> Iterator[Decoded | PlainReads]:
        """The same as feeding every piece, with runs of reads that are nothing but good packets taken at once."""
        at = 0
        while at < len(pieces):
            found = self._plain_reads(pieces[at:], arrivals_s[at:])
            if found is None:
                yield self.feed(pieces[at], arrivals_s[at])
                at += 1
            else:
                yield found
                at += len(found.rows)

    def _plain_reads(self, pieces: Sequence[bytes], arrivals_s: Sequence[float]) -> PlainReads | None:
        """From the first read on, up to the first that is anything else; None: none, nothing has changed."""
        if not self._locked or self._broken or self._fresh_from_s is None:
            return None
        size, held = self._form.bytes, len(self._data)
        data = self._data + b"".join(pieces)
        packets = np.frombuffer(data, np.uint8, len(data) // size * size).reshape(-1, size)
        good = self._form.good_rows(packets) if len(packets) else 0
        ends = held + np.cumsum([len(piece) for piece in pieces])
        done = ends // size  # packets that are whole by then, if all are good
        begun = data[good * size : (good + 1) * size]
        odd = good < len(packets) or not begun.startswith(self._sync[: len(begun)])
        reads = int(np.searchsorted(ends, good * size, side="right")) if odd else len(pieces)
        whole = int(done[reads - 1]) if reads else 0
        if not whole:
            return None
        rows = np.diff(done[:reads], prepend=0).tolist()
        arrived_s = [arrival_s - self._transmission_s for arrival_s in arrivals_s[:reads]]
        block = self._numbering.plain_reads(self._form.rows(packets[:whole]), rows, arrived_s)
        if block is None:
            return None
        self._data = data[whole * size : int(ends[reads - 1])]
        return PlainReads(block, rows)

    def _plain_packet(self, data: bytes, arrival_s: float) -> Block | None:
        """Exactly one good packet where one was expected, quickly; None: look closer, nothing has changed."""
        form = self._form
        if len(data) != form.bytes or not self._locked or self._broken:
            return None
        if not data.startswith(self._sync) or not form.passes(data, 0):
            return None
        return self._numbering.one(form.row(data, 0), arrival_s - self._transmission_s)

    # -- runs of good packets

    def _take_run(self, sorting: Sorting) -> None:
        """Every whole good packet from here on."""
        form = self._form
        while (whole := (len(self._data) - self._at) // form.bytes) > self._scalar_rows:
            count = min(whole, self._window)
            packets = np.frombuffer(self._data, np.uint8, count * form.bytes, self._at).reshape(
                count, form.bytes
            )
            good = form.good_rows(packets)
            sorting.add_block(form.rows(packets[:good]))
            self._at += good * form.bytes
            self._window = min(2 * self._window, WINDOW_MAX) if good == count else RUN_PACKETS
            if good < count:
                return
        data, at, last = self._data, self._at, len(self._data) - form.bytes
        while at <= last and data.startswith(self._sync, at) and form.passes(data, at):
            sorting.add_row(form.row(data, at))
            at += form.bytes
        self._at = at

    # -- anything else, one thing at a time

    def _take_one(self, sorting: Sorting) -> _Turn:
        data, at = self._data, self._at
        if data.startswith(self._sync, at):
            return self._take_packet(sorting)
        if self._reply_sync and data.startswith(self._reply_sync, at):
            return self._take_reply(sorting)
        if self._may_become_sync(at):
            return _Turn.WAIT
        self._drop(sorting, self._next_sync(at) - at)
        return _Turn.ON

    def _take_packet(self, sorting: Sorting) -> _Turn:
        """A sync stands here: a packet that is incomplete, damaged, or (unlocked) not yet believed."""
        form, end = self._form, self._at + self._form.bytes
        if end > len(self._data):
            return _Turn.WAIT
        good = form.passes(self._data, self._at)
        if good and (self._locked or not self._needs_follower):
            return self._accept(sorting)
        if not good and not self._locked:
            self._drop(sorting, 1)
            return _Turn.ON
        if self._may_become_sync(end):
            return _Turn.WAIT
        followed = self._begins_sync(end)
        if good and followed:
            return self._accept(sorting)
        if not good:
            sorting.reject(Reason.CHECKSUM)
            if followed:
                sorting.discard(form.bytes)
                self._at = end
                return _Turn.ON
        self._drop(sorting, 1)
        return _Turn.ON

    def _accept(self, sorting: Sorting) -> _Turn:
        sorting.add_row(self._form.row(self._data, self._at))
        self._at += self._form.bytes
        self._locked = True
        return _Turn.ON

    def _take_reply(self, sorting: Sorting) -> _Turn:
        begin = self._at + len(self._reply_sync)
        window = self._data[begin : begin + REPLY_BYTES_MAX + len(self._reply_end)]
        text, ended, _ = window.partition(self._reply_end)
        if not ended and len(window) <= REPLY_BYTES_MAX:
            text = _without_partial(text, self._reply_end)
        elif not ended:
            self._drop(sorting, 1)
            return _Turn.ON
        if not _TEXT.fullmatch(text):
            self._drop(sorting, 1)
            return _Turn.ON
        if not ended:
            return _Turn.WAIT
        sorting.add_reply(text.strip())
        self._at = begin + len(text) + len(self._reply_end)
        self._locked = True
        return _Turn.ON

    # -- finding the next beginning

    def _begins_sync(self, at: int) -> bool:
        data = self._data
        return data.startswith(self._sync, at) or (
            bool(self._reply_sync) and data.startswith(self._reply_sync, at)
        )

    def _may_become_sync(self, at: int) -> bool:
        """The data end before it is clear whether a sync stands here."""
        tail = self._data[at : at + self._sync_bytes_max]
        if len(tail) < len(self._sync) and self._sync.startswith(tail):
            return True
        return len(tail) < len(self._reply_sync) and self._reply_sync.startswith(tail)

    def _next_sync(self, at: int) -> int:
        """Where after `at` a sync begins, or may begin once more bytes are there."""
        tail = max(at + 1, len(self._data) + 1 - self._sync_bytes_max)
        whole = min(self._next_of(which, at + 1) for which in range(len(self._next)))
        if whole < tail:
            return whole
        places = range(tail, len(self._data))
        return min(whole, next((place for place in places if self._may_become_sync(place)), whole))

    def _next_of(self, which: int, at: int) -> int:
        """Where from `at` on this sync stands, looked for once: finding nothing again and again is
        quadratic."""
        if self._next[which] < at:
            found = self._data.find((self._sync, self._reply_sync)[which], at)
            self._next[which] = found if found >= 0 else len(self._data)
        return self._next[which]

    def _drop(self, sorting: Sorting, count: int) -> None:
        sorting.discard(count)
        sorting.broken = True
        self._locked = False
        self._at += count


def _without_partial(text: bytes, end: bytes) -> bytes:
    """The text without what may be the beginning of its end."""
    return text[:-1] if len(end) == 2 and text.endswith(end[:1]) else text


class PacketsEncoder:
    """Numbers -> the packets a machine under this card sends. Fields the card does not use are sent as 0."""

    def __init__(self, frame: FrameCard, link_number: int) -> None:
        self._form = PacketForm(frame, link_number)
        self._reply_sync = bytes.fromhex(self._form.dialect.reply_sync or "")
        self._reply_end = self._form.dialect.reply_line_end.encode("ascii", "replace")

    def encode(
        self,
        counts: Floats,
        *,
        first_counter: int = 0,
        time_s: Floats | None = None,
        inputs: Mapping[str, bool] | None = None,
    ) -> bytes:
        """counts: (n, k) in channel order. inputs: which status inputs are active (those in the packet)."""
        form, plan = self._form, self._form.plan
        values = np.zeros((len(counts), len(form.places)))
        values[:, : plan.channels] = counts
        if plan.counter is not None and plan.modulus is not None:
            counter = [(first_counter + row) % plan.modulus for row in range(len(counts))]
            values[:, plan.counter] = counter
        if plan.time is not None and time_s is not None:
            ticks = time_s / plan.time_unit_s
            values[:, plan.time] = np.rint(ticks) % plan.time_modulus if plan.time_modulus else ticks
        for rule in plan.inputs:
            on = (inputs or {}).get(rule.name, False) == rule.active_when
            values[:, rule.position] += float(on << (rule.bit or 0))
        return form.pack(values)

    def reply(self, text: bytes) -> bytes:
        """A reply of the machine as it stands between the packets."""
        return self._reply_sync + text + self._reply_end
