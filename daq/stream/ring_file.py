"""RingFile: the file behind a ring, its header words, its size. For writer and readers; decides nothing.

The file lies on tmpfs: one header page, then `capacity` bytes that are written round and round. Positions are
counts of bytes since the ring began, they only grow; the place in the file is position modulo capacity.

    word  who writes it   what
       0  creator, last   magic: not there = not ready
       1  creator         capacity, bytes
       2  creator         stream id
       3  creator         bytes kept free for EVENTs
       4  creator         length of the journal's name, bytes; the name itself stands from byte 1024 on
       8  writer          reserved to: bytes before this position may be written at this moment
       9  writer          position: bytes before it are whole entries
      10  writer          last sequence given out
      11  writer          monotonic ns of the newest entry
      12  writer          entries lost for want of room
      13  writer          1 = closed on purpose
      16  recorder        acknowledged position: the writer may reuse what lies before it
      17  recorder        acknowledged sequence
      18  recorder        monotonic ns: everything given to the ring before it is safely recorded

Words are native, aligned 64 bit numbers, stored and loaded in one piece; each has one writer, and the three
groups lie on cache lines of their own. Only this page is mapped. The bytes of the entries pass through pwrite
and pread (1-2 us a call): no page faults in the bench process, no large mapping that delays the end of its
life pipe when it is killed, no SIGBUS. It is not multiprocessing.shared_memory, because on Python 3.11 any
attached process that exits unlinks the living segment.
"""

from __future__ import annotations

import errno
import fcntl
import mmap
import os
from pathlib import Path

from daq.errors import RecordingError

PAGE_BYTES = 4096
RING_BYTES_MIN = PAGE_BYTES
RING_SECONDS = 60.0  # survives a disc that stalls for 10 s six times over
_MIB = 1 << 20
_JOURNAL_AT = 1024
JOURNAL_NAME_BYTES_MAX = PAGE_BYTES - _JOURNAL_AT

W_MAGIC, W_CAPACITY, W_STREAM_ID, W_EVENT_ROOM, W_JOURNAL_BYTES = 0, 1, 2, 3, 4
W_RESERVED_TO, W_POSITION, W_SEQUENCE, W_NEWEST_NS, W_LOST, W_CLOSED = 8, 9, 10, 11, 12, 13
W_ACKED_POSITION, W_ACKED_SEQUENCE, W_ACKED_NS = 16, 17, 18

_MAGIC_WORD = int.from_bytes(b"MsRing01", "little")


class RingAbsent(RecordingError):
    """No ring of that name, or one that is not ready yet: look again later."""


def ring_bytes(bytes_per_s: float, seconds: float = RING_SECONDS) -> int:
    """Capacity for so many seconds of entries, in whole pages, 1 MiB at least."""
    pages = -int(-bytes_per_s * seconds // PAGE_BYTES)
    return max(_MIB, pages * PAGE_BYTES)


def event_room_bytes(capacity: int) -> int:
    """What RAW and BLOCK may not use, so that a full ring can still say what happened."""
    return min(_MIB, capacity // 16)


class RingFile:
    """An open ring file: header words and the round of bytes behind them."""

    def __init__(self, descriptor: int, path: Path, *, writable: bool) -> None:
        self.path = path
        self.descriptor = descriptor
        access = mmap.ACCESS_WRITE if writable else mmap.ACCESS_READ
        self._map = mmap.mmap(descriptor, PAGE_BYTES, access=access)
        self._page = memoryview(self._map)
        self.words = self._page.cast("Q")
        self.capacity: int = self.words[W_CAPACITY]
        self.stream_id: int = self.words[W_STREAM_ID]

    @classmethod
    def create(cls, path: str | Path, size_bytes: int, stream_id: int, *, journal: str = "") -> RingFile:
        """A new ring, owned (flock) by this process for as long as it lives. journal: the folder it is emptied into,
        so that whoever finds it later knows where its data belong.
        """
        path = Path(path)
        name = os.fsencode(journal)
        if len(name) > JOURNAL_NAME_BYTES_MAX:
            raise RecordingError(
                f"journal's name has {len(name)} bytes, at most {JOURNAL_NAME_BYTES_MAX} are allowed"
            )
        capacity = -(-max(size_bytes, RING_BYTES_MIN) // PAGE_BYTES) * PAGE_BYTES
        _demand_room(path, capacity + PAGE_BYTES)
        try:
            descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o600)
        except OSError as error:
            raise RecordingError(f"ring {path} cannot be created: {error.strerror}") from error
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
            # A bare ftruncate past the file system's size would end in SIGBUS at the first touch.
            os.posix_fallocate(descriptor, 0, capacity + PAGE_BYTES)
        except OSError as error:
            os.unlink(path)
            os.close(descriptor)
            raise _does_not_fit(path, capacity + PAGE_BYTES, error) from error
        ring = cls(descriptor, path, writable=True)
        ring.capacity, ring.stream_id = capacity, stream_id
        ring.words[W_CAPACITY] = capacity
        ring.words[W_STREAM_ID] = stream_id
        ring.words[W_EVENT_ROOM] = event_room_bytes(capacity)
        ring.words[W_JOURNAL_BYTES] = len(name)
        ring._page[_JOURNAL_AT : _JOURNAL_AT + len(name)] = name
        ring.words[W_MAGIC] = _MAGIC_WORD
        return ring

    @classmethod
    def open(cls, path: str | Path, *, writable: bool = False) -> RingFile:
        """A ring that somebody else has created."""
        path = Path(path)
        try:
            descriptor = os.open(path, (os.O_RDWR if writable else os.O_RDONLY) | os.O_CLOEXEC)
        except FileNotFoundError as error:
            raise RingAbsent(f"no ring at {path}") from error
        except OSError as error:
            raise RecordingError(f"ring {path} cannot be opened: {error.strerror}") from error
        size = os.fstat(descriptor).st_size
        ring = cls(descriptor, path, writable=writable) if size > PAGE_BYTES else None
        if ring is not None and ring.words[W_MAGIC] == _MAGIC_WORD and ring.capacity + PAGE_BYTES == size:
            return ring
        ring.close() if ring is not None else os.close(descriptor)
        raise RingAbsent(f"ring {path} is not ready")

    @property
    def journal(self) -> str:
        """The folder of the journal this ring is emptied into; "" where its creator named none."""
        length = min(int(self.words[W_JOURNAL_BYTES]), JOURNAL_NAME_BYTES_MAX)
        return os.fsdecode(bytes(self._page[_JOURNAL_AT : _JOURNAL_AT + length]))

    def write(self, position: int, data: bytes) -> None:
        """Bytes to their place, in two pieces where the round ends between them."""
        place = position % self.capacity
        first = min(len(data), self.capacity - place)
        wrote = os.pwrite(self.descriptor, data if first == len(data) else data[:first], PAGE_BYTES + place)
        if first < len(data):
            wrote += os.pwrite(self.descriptor, data[first:], PAGE_BYTES)
        if wrote != len(data):
            raise OSError(errno.EIO, "short write")

    def read(self, start: int, end: int) -> bytes:
        """Copy of the bytes between two positions; the caller checks that it was not overtaken meanwhile."""
        place = start % self.capacity
        first = min(end - start, self.capacity - place)
        data = os.pread(self.descriptor, first, PAGE_BYTES + place)
        if first < end - start:
            data += os.pread(self.descriptor, end - start - first, PAGE_BYTES)
        return data

    def owned(self) -> bool:
        """True while the process that created the ring lives."""
        try:
            fcntl.flock(self.descriptor, fcntl.LOCK_SH | fcntl.LOCK_NB)
        except BlockingIOError:
            return True
        fcntl.flock(self.descriptor, fcntl.LOCK_UN)
        return False

    def close(self) -> None:
        """Unmap and close; twice is once. The file stays."""
        if self.descriptor >= 0:
            self.words.release()
            self._page.release()
            self._map.close()
            os.close(self.descriptor)
            self.descriptor = -1


def _demand_room(path: Path, total_bytes: int) -> None:
    try:
        folder = os.statvfs(path.parent)
    except OSError as error:
        raise RecordingError(f"ring folder {path.parent}: {error.strerror}") from error
    if total_bytes > folder.f_bavail * folder.f_frsize:
        raise _does_not_fit(path, total_bytes, None)


def _does_not_fit(path: Path, total_bytes: int, error: OSError | None) -> RecordingError:
    folder = os.statvfs(path.parent)
    free = folder.f_bavail * folder.f_frsize
    why = f" ({error.strerror})" if error is not None else ""
    return RecordingError(
        f"ring of {total_bytes / _MIB:.1f} MiB does not fit: {path.parent} has {free / _MIB:.1f} MiB free of "
        f"{folder.f_blocks * folder.f_frsize / _MIB:.1f} MiB{why}; make it larger or lower the sample rate"
    )
