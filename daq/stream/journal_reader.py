"""JournalReader: entries back out of a journal, while it is written or long after. Never writes a byte.

It shows every acknowledged entry, none twice, none altered, none out of order; behind the last sound batch it
shows nothing. `synced_only` holds back what the recorder has appended but not yet acknowledged.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from daq.errors import RecordDamaged
from daq.stream.checkpoint import Checkpoint
from daq.stream.checkpoint_file import read_checkpoint
from daq.stream.entry import Entry, EntryDamaged, Kind, Packed, gather
from daq.stream.files import Files, OsFiles, told
from daq.stream.journal_walk import Batch, Walk
from daq.stream.segments import (
    CHECKPOINT_NAME,
    SegmentFlag,
    SegmentHeader,
    segment_name,
    segment_numbers,
)

READ_BYTES = 1 << 20


@dataclass(frozen=True, slots=True)
class Verified:
    """A journal whose every batch continues the chain.

    undeclared_holes: missing numbers that no ring_loss entry declares. after_error: segments begun because a
    sync or write failed. closed: ended on purpose.
    """

    stream_id: int
    entries: int
    first_sequence: int
    last_sequence: int
    undeclared_holes: int
    segments: int
    after_error: int
    chain: bytes
    closed: bool


class JournalReader:
    """Reads a journal's folder. Usable before the recorder has made it: there is just nothing yet."""

    def __init__(
        self,
        folder: str | Path,
        *,
        after_sequence: int = 0,
        synced_only: bool = False,
        files: Files | None = None,
    ) -> None:
        self._folder = Path(folder)
        self._files = files if files is not None else OsFiles()
        self._walk = Walk(self._folder, self._files)
        self._synced_only = synced_only
        self._held_back: Packed | None = None
        self._vouched = 0
        self.last_sequence = after_sequence

    @property
    def stream_id(self) -> int | None:
        """The stream's number; None before the first entry was read."""
        return self._walk.segment.stream_id if self._walk.segment is not None else None

    @property
    def chain(self) -> bytes:
        """SHA-256 over everything up to the batch read last, in order; what `Journal.chain` was then."""
        return self._walk.chain

    def read_new(self, bytes_max: int = READ_BYTES) -> list[Entry]:
        """Entries not seen before, in order; at least one piece, then more up to about that many bytes."""
        entries: list[Entry] = []
        size = 0
        while size < bytes_max and (packed := self.read_packed()) is not None:
            size += len(packed.data)
            entries += packed.entries()
        return entries

    def read_packed(self) -> Packed | None:
        """The next piece not seen before, as bytes."""
        packed, self._held_back = self._held_back, None
        while packed is None:
            with told(self._folder, self.last_sequence):
                batch = self._walk.next_batch()
            if batch is None:
                return None
            packed = batch.packed().after(self.last_sequence)
        if self._synced_only and packed.last_sequence > self._vouched:
            self._vouched = self.synced_sequence()
            if packed.last_sequence > self._vouched:
                self._held_back = packed
                return None
        self.last_sequence = packed.last_sequence
        return packed

    def iterate(self, from_sequence: int = 0) -> Iterator[Entry]:
        """A pass of its own over everything that is there now."""
        for packed in self.iterate_packed(from_sequence):
            yield from packed.entries()

    def iterate_packed(self, from_sequence: int = 0) -> Iterator[Packed]:
        """The same as bytes."""
        known = from_sequence - 1
        for batch in self._batches(Walk(self._folder, self._files)):
            packed = batch.packed().after(known)
            if packed is not None:
                known = packed.last_sequence
                yield packed

    def checkpoint(self) -> Checkpoint | None:
        """The recorder's last sound word on how far it got."""
        with told(self._folder):
            return read_checkpoint(self._folder, self._files)

    def synced_sequence(self) -> int:
        """Last entry the checkpoint vouches for; 0 = none."""
        point = self.checkpoint()
        return point.sequence if point is not None else 0

    def verify(self) -> Verified:
        """Everything looked at once; RecordDamaged names the first bad batch."""
        walk = Walk(self._folder, self._files)
        tally = _Tally()
        for batch in self._batches(walk):
            assert walk.segment is not None
            tally.add(batch, walk.segment)
        if walk.segment is None:
            raise RecordDamaged("journal holds no segment", first_bad=str(self._folder))
        point = self.checkpoint()
        if point is not None:
            _compare(point, walk, max(tally.last_sequence, walk.last_sequence))
        return Verified(
            stream_id=walk.segment.stream_id,
            entries=tally.entries,
            first_sequence=tally.first_sequence,
            last_sequence=tally.last_sequence,
            undeclared_holes=tally.undeclared_holes,
            segments=len(segment_numbers(self._files.names(self._folder))),
            after_error=sum(SegmentFlag.AFTER_ERROR in segment.flags for segment in walk.flagged),
            chain=walk.chain,
            closed=point is not None and point.closed,
        )

    def close(self) -> None:
        """Let go of the open segment."""
        self._walk.close()

    def _batches(self, walk: Walk) -> Iterator[Batch]:
        try:
            while True:
                with told(self._folder, walk.last_sequence):
                    batch = walk.next_batch()
                if batch is None:
                    return
                yield batch
        finally:
            walk.close()


class _Tally:
    """What verify counts while it walks."""

    def __init__(self) -> None:
        self.entries = 0
        self.first_sequence = 0
        self.last_sequence = 0
        self.undeclared_holes = 0

    def add(self, batch: Batch, segment: SegmentHeader) -> None:
        """One batch; its entries must be exactly what its header says."""
        place = f"{segment_name(segment.number)}, byte {batch.start}"
        try:
            packed = gather(batch.data, stream_id=segment.stream_id, after_sequence=0)
        except EntryDamaged as error:
            raise RecordDamaged(error.why, first_bad=place) from error
        if packed is None or packed != batch.packed():
            raise RecordDamaged("batch does not hold the entries it says", first_bad=place)
        news = packed.after(self.last_sequence)
        if news is not None:
            self._count(news)

    def _count(self, news: Packed) -> None:
        if self.first_sequence == 0:
            self.first_sequence = news.first_sequence
            self.last_sequence = news.first_sequence - 1
        if news.last_sequence - self.last_sequence != news.count:
            for entry in news.entries():
                self.undeclared_holes += _undeclared(entry, self.last_sequence)
                self.last_sequence = entry.sequence
        self.entries += news.count
        self.last_sequence = news.last_sequence


def _compare(point: Checkpoint, walk: Walk, last_sequence: int) -> None:
    """What was acknowledged must be there; behind an end on purpose there must be nothing."""
    if walk.segment is not None and point.stream_id != walk.segment.stream_id:
        raise RecordDamaged("checkpoint of another stream", first_bad=CHECKPOINT_NAME)
    if point.sequence > last_sequence:
        raise RecordDamaged(f"acknowledged entries up to {point.sequence} are missing", first_bad=walk.place)
    if point.closed and point.sequence != last_sequence:
        raise RecordDamaged(f"entries behind {point.sequence}, the journal's end", first_bad=walk.place)


def _undeclared(entry: Entry, before: int) -> int:
    """Missing numbers directly before this entry that it does not itself declare as lost."""
    missing = entry.sequence - before - 1
    if missing and entry.kind is Kind.EVENT:
        event = json.loads(entry.payload)  # not payloads.py: the recorder starts without numpy
        if event.get("event") == "ring_loss" and event.get("entries") == missing:
            return 0
    return missing
