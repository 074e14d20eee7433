"""Walk: one pass over a journal's batches in order, from segment to segment. Never guesses.

A walk may run while the journal is being written: at the end it says None and can be asked again later. It
raises RecordDamaged, naming the place, where the chain breaks before the point at which a later segment goes
on; behind the last good batch of the last segment there is only the end.
"""

from __future__ import annotations

from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path

from daq.errors import RecordDamaged
from daq.stream.entry import Packed
from daq.stream.files import Files
from daq.stream.segments import (
    BATCH_HEADER_BYTES,
    BODY_OFFSET,
    SEGMENT_HEADER_BYTES,
    BatchHeader,
    SegmentHeader,
    continues,
    segment_name,
    segment_numbers,
    unpack_batch_header,
    unpack_segment_header,
)


@dataclass(frozen=True, slots=True)
class Batch:
    """A whole batch whose digest continues the chain; it stands from `start` to `end` in its segment."""

    header: BatchHeader
    data: bytes
    start: int
    end: int

    @property
    def raw(self) -> bytes:
        """Its bytes as they stand in the segment."""
        return self.header.head + self.header.digest + self.data

    def packed(self) -> Packed:
        """As consecutive entries."""
        header = self.header
        return Packed(self.data, header.count, header.first_sequence, header.last_sequence, header.newest_ns)


def read_batch(files: Files, handle: int, segment: SegmentHeader, offset: int, chain: bytes) -> Batch | None:
    """The batch at `offset`, or None where none continues the chain (or none does yet)."""
    head = files.read(handle, BATCH_HEADER_BYTES, offset)
    header = unpack_batch_header(head, segment.stream_id, segment.size_bytes - offset)
    if header is None:
        return None
    data = files.read(handle, header.length, offset + BATCH_HEADER_BYTES)
    if not continues(header, data, chain):
        return None
    return Batch(header, data, offset, offset + BATCH_HEADER_BYTES + header.length)


def read_segment_header(files: Files, handle: int, path: Path) -> SegmentHeader:
    """The header of a segment, which is synced before the segment gets its name: an unsound one is damage."""
    header = unpack_segment_header(files.read(handle, SEGMENT_HEADER_BYTES, 0))
    if header is None or path.name != segment_name(header.number):
        raise RecordDamaged("segment header is not sound", first_bad=f"{path.name}, byte 0")
    return header


class Walk:
    """Where one reader stands in a journal."""

    def __init__(self, folder: Path, files: Files) -> None:
        self._folder = folder
        self._files = files
        self._handle = -1
        self.segment: SegmentHeader | None = None
        self.offset = 0
        self.chain = b""
        self.last_sequence = 0
        self.flagged: list[SegmentHeader] = []
        self._boundaries: dict[bytes, int] = {}

    @property
    def place(self) -> str:
        """The place of the next batch, in words."""
        name = segment_name(self.segment.number) if self.segment is not None else "no segment"
        return f"{name}, byte {self.offset} (after entry {self.last_sequence})"

    def next_batch(self) -> Batch | None:
        """The next batch in file order, repeated ones included; None where there is nothing more yet."""
        while self.segment is not None or self._enter(self._following(0)):
            batch = self._here()
            if batch is not None:
                return batch
            following = self._following(self.segment.number if self.segment is not None else 0)
            if following is None:
                return None
            batch = self._here()  # the writer may have finished a batch, and then the segment, since the look
            if batch is not None:
                return batch
            self._enter(following)
        return None

    def close(self) -> None:
        """Let go of the open segment; twice is once."""
        if self._handle >= 0:
            self._files.close(self._handle)
            self._handle = -1

    def _here(self) -> Batch | None:
        assert self.segment is not None
        batch = read_batch(self._files, self._handle, self.segment, self.offset, self.chain)
        if batch is not None:
            self.offset, self.chain = batch.end, batch.header.digest
            self.last_sequence = batch.header.last_sequence
            self._boundaries[self.chain] = self.last_sequence
        return batch

    def _following(self, number: int) -> int | None:
        numbers = segment_numbers(self._files.names(self._folder))
        return next((candidate for candidate in numbers if candidate > number), None)

    def _enter(self, number: int | None) -> bool:
        """Step into a segment, at the batch boundary it continues."""
        if number is None:
            return False
        path = self._folder / segment_name(number)
        try:
            handle = self._files.open(path, writable=False)
        except FileNotFoundError:  # removed since the folder was listed: look again
            return False
        with ExitStack() as undo:
            undo.callback(self._files.close, handle)
            header = read_segment_header(self._files, handle, path)
            if self.segment is not None and self._boundaries.get(header.chain) != header.after_sequence:
                raise RecordDamaged("the chain breaks inside a segment", first_bad=self.place)
            undo.pop_all()
        self.close()
        self._handle, self.segment = handle, header
        self.offset, self.chain, self.last_sequence = BODY_OFFSET, header.chain, header.after_sequence
        self._boundaries = {header.chain: header.after_sequence}
        if header.flags:
            self.flagged.append(header)
        return True
