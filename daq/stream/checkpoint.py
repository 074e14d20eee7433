"""Checkpoint: how far a journal has been acknowledged, in two slots written in turn. Pure.

Written after each sync of the data, never before, and not itself synced except at the end: it can only lag
behind, and a restarted recorder then scans a little more. A torn slot leaves the other one. It saves time and
lets `verify` tell a torn tail from lost data; no entry depends on it.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass
from zlib import crc32

CHECKPOINT_BYTES = 8192
_SLOT_STRIDE = 4096  # two slots never share a sector or a page
_SLOT = struct.Struct("<8sQQIIQQ32s")
_MAGIC = b"MsChk\0\0\1"
_CRC = struct.Struct("<I")


@dataclass(frozen=True, slots=True)
class Checkpoint:
    """Everything up to `sequence` is acknowledged; its last batch ends at `offset` of segment `segment`.

    counter: rises by one with each checkpoint; the sound slot with the higher one counts.
    closed: the journal was ended on purpose, so nothing may stand behind this.
    """

    counter: int
    stream_id: int
    segment: int
    offset: int
    sequence: int
    chain: bytes
    closed: bool


def slot_offset(counter: int) -> int:
    """Where in the file that checkpoint goes."""
    return (counter % 2) * _SLOT_STRIDE


def pack_checkpoint(point: Checkpoint) -> bytes:
    """The bytes of one slot."""
    head = _SLOT.pack(
        _MAGIC,
        point.counter,
        point.stream_id,
        point.segment,
        point.closed,
        point.offset,
        point.sequence,
        point.chain,
    )
    return head + _CRC.pack(crc32(head))


def newest_checkpoint(data: bytes) -> Checkpoint | None:
    """The newer sound slot of a checkpoint file; None where neither is sound."""
    slots = [_unpack(data[offset : offset + _SLOT.size + _CRC.size]) for offset in (0, _SLOT_STRIDE)]
    return max((slot for slot in slots if slot is not None), key=lambda slot: slot.counter, default=None)


def _unpack(data: bytes) -> Checkpoint | None:
    if len(data) < _SLOT.size + _CRC.size or not data.startswith(_MAGIC):
        return None
    if _CRC.unpack_from(data, _SLOT.size)[0] != crc32(data[: _SLOT.size]):
        return None
    _, counter, stream_id, segment, closed, offset, sequence, chain = _SLOT.unpack_from(data)
    return Checkpoint(counter, stream_id, segment, offset, sequence, chain, bool(closed))
