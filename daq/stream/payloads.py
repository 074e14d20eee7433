"""Payloads: what stands inside an entry of each kind, and its bytes. Bit-exact both ways, NaN included.

RAW    link u16, sent u8, zero u8, then the bytes of the link as they came in or went out.
BLOCK  source u16, columns u16, rows u32, first index i64, gap samples i64, then the times and the columns
       one after the other as float64. All little-endian.
EVENT  compact JSON in UTF-8 with sorted keys; always "event", "time_s" and "severity". JSON knows no NaN
       and no infinity: such numbers become null.

It refuses to guess: a payload of the wrong size or shape is EntryDamaged.
"""

from __future__ import annotations

import json
import math
import struct
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from enum import Enum
from itertools import groupby
from typing import Any

import numpy as np
import numpy.typing as npt

from daq.stream.block import Block, Floats
from daq.stream.entry import EntryDamaged

_RAW = struct.Struct("<HBB")
_BLOCK = struct.Struct("<HHIqq")
_SHAPE = struct.Struct("<HHI")
_SHAPE_BYTES = _SHAPE.size


@dataclass(frozen=True, slots=True)
class Raw:
    """Bytes of one link: received, or sent by midspan."""

    link: int
    sent: bool
    data: bytes


def pack_raw(link: int, sent: bool, data: bytes) -> bytes:
    """Payload of a RAW entry."""
    return _RAW.pack(link, sent, 0) + data


def unpack_raw(payload: bytes) -> Raw:
    """What pack_raw was given."""
    if len(payload) < _RAW.size:
        raise EntryDamaged(f"RAW payload of {len(payload)} bytes")
    link, sent, zero = _RAW.unpack_from(payload)
    if sent > 1 or zero:
        raise EntryDamaged(f"RAW payload with direction {sent}, spare field {zero}")
    return Raw(link, bool(sent), payload[_RAW.size :])


def pack_block(block: Block) -> bytes:
    """Payload of a BLOCK entry."""
    rows, columns = block.counts.shape
    head = _BLOCK.pack(block.source, columns, rows, block.first_index, block.gap_samples)
    time_s = block.time_s.astype("<f8", copy=False)
    counts = block.counts.astype("<f8", copy=False)
    return head + time_s.tobytes() + counts.tobytes(order="F")


def unpack_block(payload: bytes) -> Block:
    """What pack_block was given, as read-only views of the payload."""
    if len(payload) < _BLOCK.size:
        raise EntryDamaged(f"BLOCK payload of {len(payload)} bytes")
    source, columns, rows, first_index, gap_samples = _BLOCK.unpack_from(payload)
    if len(payload) != _BLOCK.size + 8 * rows * (columns + 1):
        raise EntryDamaged(f"BLOCK payload of {len(payload)} bytes for {rows} rows of {columns} columns")
    numbers = np.frombuffer(payload, dtype="<f8", offset=_BLOCK.size)
    return Block(
        source=source,
        first_index=first_index,
        time_s=numbers[:rows],
        counts=numbers[rows:].reshape(columns, rows).T,
        gap_samples=gap_samples,
    )


@dataclass(frozen=True, slots=True, eq=False)
class Run:
    """Consecutive blocks of one source that have the same shape. first_index, gap_samples: (blocks,); time_s (n,) and
    counts (n, k) of all their rows."""

    source: int
    rows: int
    first_index: npt.NDArray[np.int64]
    gap_samples: npt.NDArray[np.int64]
    time_s: Floats
    counts: Floats


def unpack_runs(payloads: Sequence[bytes]) -> Iterator[Run]:
    """Many blocks at once, the same numbers as `unpack_block` gives one by one."""
    for (head, length), run in groupby(payloads, lambda payload: (payload[:_SHAPE_BYTES], len(payload))):
        if length < _BLOCK.size:
            raise EntryDamaged(f"BLOCK payload of {length} bytes")
        source, columns, rows = _SHAPE.unpack(head)
        if length != _BLOCK.size + 8 * rows * (columns + 1):
            raise EntryDamaged(f"BLOCK payload of {length} bytes for {rows} rows of {columns} columns")
        table = np.frombuffer(b"".join(run), dtype=np.uint8).reshape(-1, length)
        whole = np.ascontiguousarray(table[:, _SHAPE_BYTES : _BLOCK.size]).view("<i8")
        numbers = np.ascontiguousarray(table[:, _BLOCK.size :]).view("<f8").reshape(-1, columns + 1, rows)
        yield Run(
            source,
            rows,
            whole[:, 0],
            whole[:, 1],
            numbers[:, 0, :].reshape(-1),
            numbers[:, 1:, :].transpose(0, 2, 1).reshape(-1, columns),
        )


def pack_event(event: Mapping[str, object]) -> bytes:
    """Payload of an EVENT entry."""
    assert {"event", "time_s", "severity"} <= event.keys(), f"incomplete event {sorted(event)}"
    try:
        text = _dump(event)
    except ValueError:  # a NaN or an infinity somewhere inside: rare, so only then walk the tree
        text = _dump(_finite(event))
    return text.encode("utf-8", "backslashreplace")  # a lone surrogate becomes its JSON escape


def unpack_event(payload: bytes) -> dict[str, Any]:
    """The event's fields."""
    try:
        event = json.loads(payload)
    except ValueError as error:
        raise EntryDamaged(f"EVENT payload is not JSON: {error}") from error
    if not isinstance(event, dict):
        raise EntryDamaged("EVENT payload is not a JSON object")
    return event


def _dump(value: object) -> str:
    return json.dumps(
        value, allow_nan=False, ensure_ascii=False, sort_keys=True, separators=(",", ":"), default=_plain
    )


def _plain(value: object) -> object:
    """Values of ours that JSON does not know."""
    if isinstance(value, np.generic):
        return value.item()
    if isinstance(value, np.ndarray):
        return value.tolist()
    if isinstance(value, Enum):
        return value.value
    if isinstance(value, Mapping):
        return dict(value)
    if isinstance(value, set | frozenset):
        return sorted(value)
    raise TypeError(f"{type(value).__name__} has no JSON form")


def _finite(value: object) -> object:
    """The same tree with null for every number that JSON cannot hold."""
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    if isinstance(value, str | int | None):
        return value
    return _finite(_plain(value))
