"""Sink: the file HDF5 writes a sealed record into, which never tells HDF5 that the disk refused.

A failed write inside HDF5 ends the process by SIGSEGV when its objects are released (measured:
6 of 6), and no `except` catches that. So the sink remembers the first error, keeps what could not be
written in memory until HDF5 has closed in peace, and the sealer, who asks after every piece, throws the
file away.
"""

from __future__ import annotations

import os
from pathlib import Path
from typing import TypeAlias

Buffer: TypeAlias = bytes | bytearray | memoryview


class Sink:
    """A new file for h5py's file-object driver. `failed` is the first error of the disk, or None."""

    def __init__(self, path: Path) -> None:
        self._descriptor = os.open(path, os.O_RDWR | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o644)
        self._place = 0
        self._end = 0
        self._refused: list[tuple[int, bytes]] = []
        self.failed: OSError | None = None

    def write(self, data: Buffer) -> int:
        piece = bytes(data)
        if self.failed is None:
            self._try_write(piece)
        if self.failed is not None:
            self._refused.append((self._place, piece))
        self._place += len(piece)
        self._end = max(self._end, self._place)
        return len(piece)

    def _try_write(self, piece: bytes) -> None:
        written = 0
        try:
            while written < len(piece):
                written += os.pwrite(self._descriptor, piece[written:], self._place + written)
        except OSError as error:
            self.failed = error

    def readinto(self, buffer: memoryview) -> int:
        size = len(buffer)
        found = os.pread(self._descriptor, size, self._place)
        buffer[:size] = found + bytes(size - len(found))
        for place, piece in self._refused:  # later ones win, as on disk
            first, last = max(place, self._place), min(place + len(piece), self._place + size)
            if first < last:
                buffer[first - self._place : last - self._place] = piece[first - place : last - place]
        self._place += size
        return size

    def seek(self, offset: int, whence: int = os.SEEK_SET) -> int:
        base = {os.SEEK_SET: 0, os.SEEK_CUR: self._place, os.SEEK_END: self._end}[whence]
        self._place = base + offset
        return self._place

    def tell(self) -> int:
        return self._place

    def truncate(self, size: int | None = None) -> int:
        self._end = self._place if size is None else size
        if self.failed is None:
            try:
                os.ftruncate(self._descriptor, self._end)
            except OSError as error:
                self.failed = error
        return self._end

    def flush(self) -> None:
        """Nothing is held back here; what HDF5 flushes has been written already."""

    def settle(self, front: bytes) -> None:
        """After HDF5 has closed: write the front, make all of it durable. Raises the disk's error."""
        if self.failed is None:
            self._place = 0
            self._try_write(front)
        if self.failed is not None:
            raise self.failed
        os.fsync(self._descriptor)

    def release(self) -> None:
        os.close(self._descriptor)
