"""RingReader: polls a ring for whole, checked entries. Any number of readers; one of them acknowledges.

Reading never disturbs the writer. A reader copies bytes first and then looks at the writer's `reserved to`
word: where the writer has come round into what was copied, the copy is thrown away and the reader goes on at
the acknowledged position, which is never overwritten. Each entry's CRC-32, stream and sequence are checked.

The acknowledging reader is the recorder. After a restart it starts with `after_sequence` = the last entry in
its journal; the ring's own acknowledgement only lags behind and would double entries.

It refuses to wait, to read a clock, and to show an entry that does not verify.
"""

from __future__ import annotations

import fcntl
from collections import deque
from collections.abc import Iterator
from pathlib import Path

from daq.errors import RecordDamaged, RecordingError
from daq.stream.entry import ENTRY_BYTES_MAX, Entry, EntryDamaged, Packed, gather
from daq.stream.ring_file import (
    W_ACKED_NS,
    W_ACKED_POSITION,
    W_ACKED_SEQUENCE,
    W_CLOSED,
    W_LOST,
    W_POSITION,
    W_RESERVED_TO,
    RingAbsent,
    RingFile,
)

READ_BYTES = 1 << 18
_OVERTAKEN_TRIES = 3
_DAMAGED_POLLS_MAX = 50  # on weakly ordered processors a body may show after its position: look again first
_MARKS_MAX = 4096


class RingReader:
    """Reads entries in order of sequence, each at most once.

    after_sequence: entries up to this number are known already and are not shown again.
    newest: begin behind the newest entry instead of at the acknowledged position.
    """

    def __init__(self, path: str | Path, *, after_sequence: int | None = None, newest: bool = False) -> None:
        self._ring = RingFile.open(path)
        self._words = self._ring.words
        self._position: int = self._words[W_POSITION if newest else W_ACKED_POSITION]
        self._known = after_sequence or 0
        self._last: int | None = after_sequence
        self._damaged_polls = 0
        self._marks: deque[tuple[int, int]] = deque()
        self._acknowledging: RingFile | None = None
        self.overtaken = 0
        self.missing_entries = 0

    # --- what the ring says of itself ---------------------------------------------------------------------
    @property
    def stream_id(self) -> int:
        """The stream's number."""
        return self._ring.stream_id

    @property
    def journal(self) -> str:
        """The folder of the journal it is emptied into; "" where nobody said."""
        return self._ring.journal

    @property
    def last_sequence(self) -> int:
        """The last entry shown, or known from the start; 0 = none."""
        return self._last or 0

    @property
    def lag_bytes(self) -> int:
        """Bytes written and not yet read here."""
        return int(self._words[W_POSITION]) - self._position

    @property
    def acked_sequence(self) -> int:
        """The last entry the recorder holds safely; 0 = none."""
        return int(self._words[W_ACKED_SEQUENCE])

    @property
    def acked_ns(self) -> int:
        """Everything given to the ring before this monotonic instant is recorded; 0 = nothing was said yet."""
        return int(self._words[W_ACKED_NS])

    @property
    def lost_entries(self) -> int:
        """Entries the writer had no room for."""
        return int(self._words[W_LOST])

    def finished(self) -> bool:
        """True once the writer has closed or died and everything it wrote has been read."""
        ended = bool(self._words[W_CLOSED]) or not self._ring.owned()
        return ended and self.lag_bytes == 0

    # --- reading ------------------------------------------------------------------------------------------
    def read_new(self, bytes_max: int = READ_BYTES) -> list[Entry]:
        """Entries not seen before, in order; empty where there is nothing."""
        packed = self.read_packed(bytes_max)
        return packed.entries() if packed is not None else []

    def read_packed(self, bytes_max: int = READ_BYTES) -> Packed | None:
        """The same as bytes, which is all that a recorder needs."""
        while self._words[W_POSITION] != self._position:
            packed = self._next(bytes_max)
            if packed is None:
                return None
            news = packed.after(self._known)
            if news is not None:
                self._count(news)
                return news
        return None

    def _next(self, bytes_max: int) -> Packed | None:
        for _ in range(_OVERTAKEN_TRIES):
            written: int = self._words[W_POSITION]
            data = self._ring.read(self._position, min(written, self._position + bytes_max))
            if self._words[W_RESERVED_TO] - self._position > self._ring.capacity:
                self.overtaken += 1
                self._position = self._words[W_ACKED_POSITION]
                continue
            packed = self._gather(data)
            if packed is None and len(data) == bytes_max < ENTRY_BYTES_MAX:
                bytes_max = ENTRY_BYTES_MAX  # one entry is longer than the piece that was asked for
                continue
            if packed is not None:
                self._position += len(packed.data)
                self._mark(packed.last_sequence)
            return packed
        return None

    def _gather(self, data: bytes) -> Packed | None:
        try:
            packed = gather(data, stream_id=self.stream_id, after_sequence=0)
        except EntryDamaged as error:
            self._damaged_polls += 1
            if self._damaged_polls < _DAMAGED_POLLS_MAX:
                return None
            where = f"position {self._position} of ring {self._ring.path.name}"
            raise RecordDamaged(error.why, first_bad=where) from error
        self._damaged_polls = 0
        return packed

    def _count(self, news: Packed) -> None:
        before = self._last if self._last is not None else news.first_sequence - 1
        self.missing_entries += news.last_sequence - before - news.count
        self._last = self._known = news.last_sequence

    # --- acknowledging ------------------------------------------------------------------------------------
    def acknowledge(self, sequence: int, monotonic_ns: int) -> None:
        """The recorder's word: entries up to `sequence`, and all from before `monotonic_ns`, are safe on disk.

        Room is given back up to the end of the last whole piece read that is covered.
        """
        if self._acknowledging is None:
            self._acknowledging = RingFile.open(self._ring.path, writable=True)
        words = self._acknowledging.words
        words[W_ACKED_SEQUENCE] = max(sequence, words[W_ACKED_SEQUENCE])
        words[W_ACKED_NS] = monotonic_ns
        while self._marks and self._marks[0][0] <= sequence:
            words[W_ACKED_POSITION] = max(self._marks.popleft()[1], words[W_ACKED_POSITION])

    def _mark(self, sequence: int) -> None:
        if len(self._marks) == _MARKS_MAX:
            self._marks.pop()  # only coarsens what the next acknowledgement gives back
        self._marks.append((sequence, self._position))

    def close(self) -> None:
        """Let go of the ring; twice is once. The file stays."""
        self._ring.close()
        if self._acknowledging is not None:
            self._acknowledging.close()

    def claim(self) -> None:
        """Become the owner of a ring whose writer has died; refused while it lives."""
        try:
            fcntl.flock(self._ring.descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError as error:
            raise RecordingError(f"ring {self._ring.path} belongs to a living process") from error


def drain(path: str | Path, *, after_sequence: int = 0) -> Iterator[Packed]:
    """What a dead run left in its ring and its journal does not hold yet.

    Append each piece to the journal, sync it, then remove the ring's file. A ring whose creator died before
    it was ready holds nothing.
    """
    try:
        reader = RingReader(path, after_sequence=after_sequence)
    except RingAbsent:
        if Path(path).exists():
            return
        raise
    try:
        reader.claim()
        while reader.lag_bytes:
            piece = reader.read_packed()
            if piece is not None:
                yield piece
    finally:
        reader.close()
