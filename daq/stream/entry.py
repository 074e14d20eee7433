"""Entry: one numbered item of the stream, and its bytes; the same in ring, journal and plain record.

    offset  size  field
         0     4  magic "MsEn"
         4     1  layout version
         5     1  kind: 1 RAW (bytes of a link), 2 BLOCK (decoded numbers), 3 EVENT (JSON)
         6     2  zero
         8     4  payload length in bytes
        12     8  stream id: one stream per life of a bench process
        20     8  sequence: running number, never reused within a stream
        28     8  monotonic clock, ns
        36     4  CRC-32 over the 36 bytes before and the payload
        40     -  payload, then zero bytes up to a multiple of 8
    All numbers little-endian.

It knows nothing of what a payload means (payloads.py) and refuses, with a reason, everything that is not
exactly one sound entry: a flipped bit anywhere, padding included, is EntryDamaged and never a wrong entry.
"""

from __future__ import annotations

import struct
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from enum import IntEnum
from itertools import pairwise
from typing import NamedTuple, TypeAlias
from zlib import crc32

from daq.errors import MidspanError

Buffer: TypeAlias = bytes | bytearray | memoryview

MAGIC = b"MsEn"
VERSION = 1
HEADER_BYTES = 40
ENTRY_BYTES_MAX = 1 << 20  # bounds what a reader must hold; a read of a link is 64 KiB at most
PAYLOAD_BYTES_MAX = ENTRY_BYTES_MAX - HEADER_BYTES

_HEAD = struct.Struct("<4sBBHIQQQ")  # all but the CRC
_CRC = struct.Struct("<I")
_FULL = struct.Struct("<4sBBHIQQQI")
_PADDING = tuple(b"\0" * (-length % 8) for length in range(8))


class EntryDamaged(MidspanError, ValueError):
    """Bytes that are not a sound entry or payload; `why` names the first thing found wrong."""

    def __init__(self, why: str) -> None:
        super().__init__(f"damaged entry: {why}")
        self.why = why


class EntryCutShort(EntryDamaged):
    """The buffer ends before the entry does; perhaps the rest is still to come."""


class PayloadTooLong(MidspanError, ValueError):
    """More bytes than one entry may hold."""


class Kind(IntEnum):
    """What an entry's payload holds."""

    RAW = 1
    BLOCK = 2
    EVENT = 3


_KINDS = {int(kind): kind for kind in Kind}


@dataclass(frozen=True, slots=True)
class Entry:
    """One item of the stream."""

    kind: Kind
    stream_id: int
    sequence: int
    monotonic_ns: int
    payload: bytes


class Header(NamedTuple):
    """A checked header and where its entry ends in the buffer."""

    kind: int
    stream_id: int
    sequence: int
    monotonic_ns: int
    payload_start: int
    payload_end: int
    end: int


@dataclass(frozen=True, slots=True)
class Packed:
    """Consecutive sound entries as their bytes, with what a carrier needs to know of them."""

    data: bytes
    count: int
    first_sequence: int
    last_sequence: int
    newest_ns: int

    def entries(self) -> list[Entry]:
        """The same as values."""
        return list(unpack_all(self.data))

    def after(self, sequence: int) -> Packed | None:
        """The part with higher numbers than that; None where there is nothing."""
        if self.first_sequence > sequence:
            return self
        later = [entry for entry in self.entries() if entry.sequence > sequence]
        return pack_all(later) if later else None


def entry_bytes(payload_bytes: int) -> int:
    """Size of an entry with a payload of that many bytes."""
    return (HEADER_BYTES + payload_bytes + 7) & ~7


def pack_fields(kind: int, stream_id: int, sequence: int, monotonic_ns: int, payload: bytes) -> bytes:
    """The bytes of one entry, without making an Entry first."""
    length = len(payload)
    if length > PAYLOAD_BYTES_MAX:
        raise PayloadTooLong(f"payload of {length} bytes; an entry holds {PAYLOAD_BYTES_MAX} at most")
    head = _HEAD.pack(MAGIC, VERSION, kind, 0, length, stream_id, sequence, monotonic_ns)
    return b"".join((head, _CRC.pack(crc32(payload, crc32(head))), payload, _PADDING[length & 7]))


def pack(entry: Entry) -> bytes:
    """The bytes of one entry."""
    return pack_fields(entry.kind, entry.stream_id, entry.sequence, entry.monotonic_ns, entry.payload)


def pack_all(entries: Iterable[Entry]) -> Packed:
    """Several entries in one piece; at least one, sequences rising."""
    listed = list(entries)
    assert listed, "nothing to pack"
    assert all(a.sequence < b.sequence for a, b in pairwise(listed)), "sequences must rise"
    data = b"".join(map(pack, listed))
    return Packed(data, len(listed), listed[0].sequence, listed[-1].sequence, listed[-1].monotonic_ns)


def check(buffer: Buffer, offset: int = 0) -> Header:
    """Everything about one entry that can be wrong, looked at once."""
    if len(buffer) - offset < HEADER_BYTES:
        raise EntryCutShort("cut short inside the header")
    magic, version, kind, zero, length, stream_id, sequence, monotonic_ns, crc = _FULL.unpack_from(
        buffer, offset
    )
    if magic != MAGIC or version != VERSION or length > PAYLOAD_BYTES_MAX:
        raise EntryDamaged(f"begins with {magic!r}, layout version {version}, payload length {length}")
    start = offset + HEADER_BYTES
    stop = start + length
    end = offset + (HEADER_BYTES + length + 7 & ~7)
    if end > len(buffer):
        raise EntryCutShort("cut short inside the payload")
    if crc32(buffer[start:stop], crc32(buffer[offset : start - 4])) != crc:
        raise EntryDamaged("CRC-32 does not match")
    if kind not in _KINDS or zero != 0:
        raise EntryDamaged(f"kind {kind}, spare field {zero}")
    if stop != end and buffer[stop:end] != _PADDING[length & 7]:
        raise EntryDamaged("padding is not zero")
    return Header(kind, stream_id, sequence, monotonic_ns, start, stop, end)


def headers(data: bytes) -> Iterator[tuple[int, int, int, int, int]]:
    """(kind, sequence, monotonic ns, payload start, payload end) of every entry, its CRC not looked at: for bytes whose
    digest has been found right a moment ago, where the CRCs would cost as much as all the rest."""
    offset, size = 0, len(data)
    read = _HEAD.unpack_from
    while offset < size:
        if size - offset < HEADER_BYTES:
            raise EntryCutShort("cut short inside the header")
        magic, version, kind, zero, length, _, sequence, monotonic_ns = read(data, offset)
        start = offset + HEADER_BYTES
        offset = start + (length + 7 & ~7)
        if magic != MAGIC or version != VERSION or zero or kind not in _KINDS or offset > size:
            raise EntryDamaged(
                f"begins with {magic!r}, layout version {version}, kind {kind}, length {length}"
            )
        yield kind, sequence, monotonic_ns, start, start + length


def unpack(buffer: Buffer, offset: int = 0) -> tuple[Entry, int]:
    """The entry that begins at `offset`, and where the next one begins."""
    kind, stream_id, sequence, monotonic_ns, start, stop, end = check(buffer, offset)
    return Entry(_KINDS[kind], stream_id, sequence, monotonic_ns, bytes(buffer[start:stop])), end


def unpack_all(data: Buffer) -> Iterator[Entry]:
    """Every entry of a buffer that holds whole entries only."""
    offset = 0
    while offset < len(data):
        entry, offset = unpack(data, offset)
        yield entry


def gather(data: bytes, *, stream_id: int, after_sequence: int) -> Packed | None:
    """The sound whole entries at the front of `data`; a cut-off last one is left for the next look.

    Damage directly at the front raises; further back it ends the piece, so that it raises at the next look.
    """
    count, first, last, newest_ns, offset = 0, -1, after_sequence, 0, 0
    while offset < len(data):
        try:
            header = check(data, offset)
            if header.stream_id != stream_id:
                raise EntryDamaged(f"stream {header.stream_id:#x} inside stream {stream_id:#x}")
            if header.sequence <= last:
                raise EntryDamaged(f"sequence {header.sequence} after {last}")
        except EntryCutShort:
            break
        except EntryDamaged:
            if count == 0:
                raise
            break
        first = header.sequence if count == 0 else first
        count, last, newest_ns, offset = count + 1, header.sequence, header.monotonic_ns, header.end
    return Packed(data[:offset], count, first, last, newest_ns) if count else None
