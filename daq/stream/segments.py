"""Segments and batches: how a journal's files look inside. Pure: bytes in, values out.

A journal is a folder of segments, `segment-00000001` and so on, each filled with zeros before it is used.

    segment   header alone in the first 4096 bytes, so that no later write touches its sector;
              then batches without gaps; then zeros
    header    magic, flags, number, stream id, last sequence before it, size, SHA-256 chain before it, CRC-32
    batch     magic, version, zeros, length, count, stream id, first and last sequence, newest ns, SHA-256;
              then entries
    SHA-256   over the digest of the batch before, this batch's other header fields, and its entries' bytes

A batch counts only where its digest continues the chain. So whatever lies behind the last good batch (torn,
stale, out of order, flipped) can't be taken for data, and nothing inside can be altered unseen.

A segment that follows a fault or a restart begins at the last acknowledged batch of the one before and
repeats, byte for byte, what was not acknowledged there. Readers pass over what they have seen.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass
from enum import IntFlag
from hashlib import sha256
from zlib import crc32

from daq.stream.entry import Packed

BODY_OFFSET = 4096
SEGMENT_PREFIX = "segment-"
SPARE_PREFIX = "spare-"
CHECKPOINT_NAME = "checkpoint"
LOCK_NAME = "lock"

_SEGMENT = struct.Struct("<8sIIQQQ32s")
_SEGMENT_MAGIC = b"MsSeg\0\0\1"
_BATCH = struct.Struct("<4sBBHIIQQQQ")
_BATCH_MAGIC = b"MsBa"
_BATCH_VERSION = 1
_CRC = struct.Struct("<I")
SEGMENT_HEADER_BYTES = _SEGMENT.size + _CRC.size
BATCH_HEADER_BYTES = _BATCH.size + 32


class SegmentFlag(IntFlag):
    """Why a segment was begun before the one before it was full."""

    NONE = 0
    AFTER_ERROR = 1
    AFTER_RESTART = 2


@dataclass(frozen=True, slots=True)
class SegmentHeader:
    """What a segment says of itself. `after_sequence` and `chain` are those of the batch it continues."""

    number: int
    stream_id: int
    after_sequence: int
    size_bytes: int
    chain: bytes
    flags: SegmentFlag


@dataclass(frozen=True, slots=True)
class BatchHeader:
    """What a batch says of itself; true only if its digest continues the chain."""

    head: bytes
    length: int
    count: int
    first_sequence: int
    last_sequence: int
    newest_ns: int
    digest: bytes


def first_chain(stream_id: int) -> bytes:
    """Where the chain begins: different for each stream, so that no segment passes for another stream's."""
    return sha256(_SEGMENT_MAGIC + stream_id.to_bytes(8, "little")).digest()


def segment_name(number: int) -> str:
    """Eight digits: listings sort as numbers do."""
    return f"{SEGMENT_PREFIX}{number:08d}"


def segment_numbers(names: list[str]) -> list[int]:
    """Numbers of the segments among a folder's names, rising."""
    digits = (name.removeprefix(SEGMENT_PREFIX) for name in names if name.startswith(SEGMENT_PREFIX))
    return sorted(int(text) for text in digits if text.isdecimal())


def pack_segment_header(header: SegmentHeader) -> bytes:
    """The bytes at the front of a segment."""
    head = _SEGMENT.pack(
        _SEGMENT_MAGIC,
        header.flags,
        header.number,
        header.stream_id,
        header.after_sequence,
        header.size_bytes,
        header.chain,
    )
    return head + _CRC.pack(crc32(head))


def unpack_segment_header(data: bytes) -> SegmentHeader | None:
    """None where it is not a sound header."""
    if len(data) < SEGMENT_HEADER_BYTES or not data.startswith(_SEGMENT_MAGIC):
        return None
    if _CRC.unpack_from(data, _SEGMENT.size)[0] != crc32(data[: _SEGMENT.size]):
        return None
    _, flags, number, stream_id, after_sequence, size_bytes, chain = _SEGMENT.unpack_from(data)
    return SegmentHeader(number, stream_id, after_sequence, size_bytes, chain, SegmentFlag(flags))


def seal_batch(packed: Packed, stream_id: int, chain: bytes) -> tuple[bytes, bytes]:
    """A batch's bytes and the chain's new head."""
    head = _BATCH.pack(
        _BATCH_MAGIC,
        _BATCH_VERSION,
        0,
        0,
        len(packed.data),
        packed.count,
        stream_id,
        packed.first_sequence,
        packed.last_sequence,
        packed.newest_ns,
    )
    digest = _digest(chain, head, packed.data)
    return b"".join((head, digest, packed.data)), digest


def unpack_batch_header(data: bytes, stream_id: int, room_bytes: int) -> BatchHeader | None:
    """None where no batch of that stream can begin here within the room left in the segment."""
    if len(data) < BATCH_HEADER_BYTES or not data.startswith(_BATCH_MAGIC):
        return None
    _, version, zero, zeros, length, count, stream, first, last, newest_ns = _BATCH.unpack_from(data)
    if version != _BATCH_VERSION or zero or zeros or stream != stream_id:
        return None
    if length + BATCH_HEADER_BYTES > room_bytes or first > last or count == 0:
        return None
    head, digest = data[: _BATCH.size], data[_BATCH.size : BATCH_HEADER_BYTES]
    return BatchHeader(head, length, count, first, last, newest_ns, digest)


def continues(header: BatchHeader, data: bytes, chain: bytes) -> bool:
    """True where this batch, whole and unaltered, is the one that follows the chain's head."""
    return len(data) == header.length and _digest(chain, header.head, data) == header.digest


def _digest(chain: bytes, head: bytes, data: bytes) -> bytes:
    hasher = sha256(chain)
    hasher.update(head)
    hasher.update(data)
    return hasher.digest()
