"""SegmentWriter: puts a journal's batches on disk, segment after segment. The Journal's hands.

renew() is the one way out of every trouble: after a failed write or sync, and after a restart, a new segment
begins at the last acknowledged batch and repeats everything behind it. A file on which a sync has failed is
never synced again, because the kernel forgets what it could not write and calls the next sync a success.

Raises OSError where nothing helps; then nothing was taken and nothing acknowledged was touched.
"""

from __future__ import annotations

from collections import deque
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path

from daq.stream.entry import Packed
from daq.stream.files import Files
from daq.stream.journal_tail import Head, Tail
from daq.stream.segments import (
    BODY_OFFSET,
    SegmentFlag,
    SegmentHeader,
    pack_segment_header,
    seal_batch,
    segment_name,
)
from daq.stream.spares import Spares

_FAULTS_MAX = 100


@dataclass(slots=True)
class _Segment:
    """The segment being written."""

    header: SegmentHeader
    handle: int
    offset: int

    def takes(self, size_bytes: int) -> bool:
        return self.offset + size_bytes <= self.header.size_bytes


class SegmentWriter:
    """What is appended, what is acknowledged, and the batches between the two, which memory holds."""

    def __init__(self, folder: Path, tail: Tail, stream_id: int, spares: Spares, files: Files) -> None:
        self._folder = folder
        self._files = files
        self._spares = spares
        self._older = tail.headers
        self._unsynced = tail.batches
        self._stream_id = stream_id
        self._segment: _Segment | None = None  # none: the next write begins with a renewal
        self._number = tail.headers[-1].number if tail.headers else 0
        self._renew_as = SegmentFlag.AFTER_RESTART if tail.headers else SegmentFlag.NONE
        self.unsynced_bytes = sum(map(len, tail.batches))
        self.synced = tail.acknowledged
        self.appended = tail.appended
        self.faults: deque[str] = deque(maxlen=_FAULTS_MAX)

    @property
    def free_bytes(self) -> int:
        """Room in the present segment."""
        here = self._segment
        return here.header.size_bytes - here.offset if here is not None else 0

    @property
    def half_used(self) -> bool:
        """True once the next segment should be made ready."""
        here = self._segment
        return here is not None and 2 * here.offset > here.header.size_bytes

    @property
    def place(self) -> tuple[int, int]:
        """Number of the present segment, and the offset at which the next batch goes."""
        assert self._segment is not None
        return self._segment.header.number, self._segment.offset

    def append(self, packed: Packed) -> None:
        """One batch behind the last one; not yet acknowledged."""
        batch, chain = seal_batch(packed, self._stream_id, self.appended.chain)
        self._place(batch)
        self._unsynced.append(batch)
        self.unsynced_bytes += len(batch)
        self.appended = Head(packed.last_sequence, chain)

    def sync(self) -> None:
        """Back only when everything appended is acknowledged."""
        self._sync_segment()
        if self._segment is None:
            self.renew()

    def delete_before(self, sequence: int) -> int:
        """Remove whole segments whose entries are all below `sequence`, the oldest first; never the newest."""
        gone = 0
        while self._older:
            later = [*self._older[1:2], *([self._segment.header] if self._segment is not None else [])]
            if not later or later[0].after_sequence >= sequence:
                break
            with suppress(FileNotFoundError):  # gone in an attempt that failed behind the removal
                self._files.remove(self._folder / segment_name(self._older[0].number))
            self._files.sync_folder(self._folder)  # else a power loss may bring back older ones only
            del self._older[0]
            gone += 1
        return gone

    def let_go(self) -> None:
        """Close the present segment; the next write would begin a new one."""
        if self._segment is not None:
            self._older.append(self._segment.header)
            with suppress(OSError):  # nothing that counts depends on this file any more
                self._files.close(self._segment.handle)
            self._segment = None

    def _place(self, batch: bytes) -> None:
        """Write a batch behind the last one, in a new segment where this one is full or given up."""
        if self._segment is not None and not self._segment.takes(len(batch)):
            self._sync_segment()
            self.renew(len(batch))
        for _ in range(2):
            if self._segment is None:
                self.renew(len(batch))
            segment = self._segment
            assert segment is not None and segment.takes(len(batch))
            try:
                self._files.write(segment.handle, batch, segment.offset)
            except OSError as error:
                last_error = error
                self._give_up("write", error)
                continue
            segment.offset += len(batch)
            return
        raise last_error

    def _sync_segment(self) -> None:
        """fdatasync once; where it fails the segment is given up, and memory holds what it owes."""
        if self._segment is None or not self._unsynced:
            return
        try:
            self._files.sync(self._segment.handle)
        except OSError as error:
            self._give_up("sync", error)
            return
        self._acknowledge()

    def _give_up(self, what: str, error: OSError) -> None:
        assert self._segment is not None
        self.faults.append(f"{what} of {segment_name(self._segment.header.number)}: {error.strerror}")
        self._renew_as |= SegmentFlag.AFTER_ERROR
        self.let_go()

    def renew(self, extra_bytes: int = 0) -> None:
        """A new segment from the last acknowledged batch on; durable before it has its name."""
        spare = self._spares.take(BODY_OFFSET + self.unsynced_bytes + extra_bytes)
        self._number += 1  # never used twice, not even after half a renewal
        header = SegmentHeader(
            number=self._number,
            stream_id=self._stream_id,
            after_sequence=self.synced.sequence,
            size_bytes=spare.size_bytes,
            chain=self.synced.chain,
            flags=self._renew_as,
        )
        body = b"".join(self._unsynced)
        path = self._folder / segment_name(self._number)
        try:
            self._files.write(spare.handle, pack_segment_header(header), 0)
            if body:
                self._files.write(spare.handle, body, BODY_OFFSET)
            self._files.sync(spare.handle)
            self._files.rename(spare.path, path)
            self._files.sync_folder(self._folder)
        except OSError:
            self._spares.discard(spare)
            with suppress(OSError):
                self._files.remove(path)
            raise
        self.let_go()
        self._segment = _Segment(header, spare.handle, BODY_OFFSET + len(body))
        self._renew_as = SegmentFlag.NONE
        self._acknowledge()

    def _acknowledge(self) -> None:
        self.synced = self.appended
        self._unsynced.clear()
        self.unsynced_bytes = 0
