"""CheckpointFile: keeps a journal's checkpoint on disk. A fault here never stops the recording."""

from __future__ import annotations

from pathlib import Path

from daq.stream.checkpoint import (
    CHECKPOINT_BYTES,
    Checkpoint,
    newest_checkpoint,
    pack_checkpoint,
    slot_offset,
)
from daq.stream.files import Files
from daq.stream.segments import CHECKPOINT_NAME


def read_checkpoint(folder: Path, files: Files) -> Checkpoint | None:
    """The newer sound slot; None where there is none."""
    try:
        handle = files.open(folder / CHECKPOINT_NAME, writable=False)
    except FileNotFoundError:
        return None
    try:
        return newest_checkpoint(files.read(handle, CHECKPOINT_BYTES, 0))
    finally:
        files.close(handle)


class CheckpointFile:
    """The file, open for writing."""

    def __init__(self, handle: int, counter: int, files: Files) -> None:
        self._files = files
        self._handle = handle
        self.counter = counter

    @classmethod
    def create(cls, folder: Path, files: Files) -> CheckpointFile:
        """A new one; what a creation that was cut short has left is replaced."""
        path = folder / CHECKPOINT_NAME
        if CHECKPOINT_NAME in files.names(folder):
            files.remove(path)
        handle = files.create(path)
        files.fill(handle, CHECKPOINT_BYTES)
        return cls(handle, 0, files)

    @classmethod
    def reopen(cls, folder: Path, files: Files) -> CheckpointFile:
        """The existing one, or a new one where it got lost."""
        if CHECKPOINT_NAME not in files.names(folder):
            return cls.create(folder, files)
        point = read_checkpoint(folder, files)
        handle = files.open(folder / CHECKPOINT_NAME, writable=True)
        return cls(handle, point.counter if point is not None else 0, files)

    def write(self, point: Checkpoint) -> None:
        """Into the slot that holds the older one."""
        assert point.counter == self.counter + 1
        self._files.write(self._handle, pack_checkpoint(point), slot_offset(point.counter))
        self.counter = point.counter

    def sync(self) -> None:
        """Only needed where nothing will follow."""
        self._files.sync(self._handle)

    def close(self) -> None:
        """Let go of it."""
        self._files.close(self._handle)
