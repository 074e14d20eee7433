"""find_tail: where a journal ends, however its recorder ended. Reads only; changes nothing.

Where a segment begins is always acknowledged, because the file is synced before it gets its name. So the last
segment, and the checkpoint where it points into it, are enough; nothing before needs to be read.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from daq.errors import RecordDamaged, RecordingError
from daq.stream.checkpoint_file import read_checkpoint
from daq.stream.files import Files
from daq.stream.journal_walk import read_batch, read_segment_header
from daq.stream.segments import (
    BODY_OFFSET,
    CHECKPOINT_NAME,
    SegmentHeader,
    segment_name,
    segment_numbers,
)


@dataclass(frozen=True, slots=True)
class Head:
    """The chain's head at some point: everything up to `sequence` stands before it."""

    sequence: int
    chain: bytes


@dataclass(frozen=True, slots=True)
class Tail:
    """The end of a journal: `acknowledged` is surely on disk; the sound `batches` behind it perhaps not."""

    headers: list[SegmentHeader]
    acknowledged: Head
    appended: Head
    batches: list[bytes]


def find_tail(folder: Path, files: Files) -> Tail:
    """The last sound batch; RecordDamaged where headers or checkpoint contradict the folder."""
    numbers = segment_numbers(files.names(folder))
    if not numbers:
        raise RecordingError(f"{folder} holds no journal")
    headers = [_header_of(folder, number, files) for number in numbers]
    last = headers[-1]
    offset, acknowledged = BODY_OFFSET, Head(last.after_sequence, last.chain)
    point = read_checkpoint(folder, files)
    if point is not None and (point.stream_id != last.stream_id or point.segment > last.number):
        raise RecordDamaged("checkpoint does not belong to the last segment", first_bad=CHECKPOINT_NAME)
    if point is not None and point.segment == last.number:
        offset, acknowledged = point.offset, Head(point.sequence, point.chain)
    return _scan(folder, headers, offset, acknowledged, files)


def _scan(folder: Path, headers: list[SegmentHeader], offset: int, start: Head, files: Files) -> Tail:
    batches: list[bytes] = []
    head = start
    handle = files.open(folder / segment_name(headers[-1].number), writable=False)
    try:
        while (batch := read_batch(files, handle, headers[-1], offset, head.chain)) is not None:
            batches.append(batch.raw)
            head = Head(batch.header.last_sequence, batch.header.digest)
            offset = batch.end
    finally:
        files.close(handle)
    return Tail(headers, start, head, batches)


def _header_of(folder: Path, number: int, files: Files) -> SegmentHeader:
    path = folder / segment_name(number)
    handle = files.open(path, writable=False)
    try:
        return read_segment_header(files, handle, path)
    finally:
        files.close(handle)
