"""Journal: the record of a stream on disk, kept by the recorder. What sync() acknowledged is never lost.

append  one batch, one write; other processes can read it at once, a power loss may still take it
sync    fdatasync, then a checkpoint: from here on the entries count as acknowledged
resume  after any end, a kill or a power loss: from the last acknowledged batch on in a new segment

Segments are filled with zeros ahead of use, so that a full disk is found before a run and not during it, and
a sync moves data only (layout: segments.py). What is not yet acknowledged is held in memory, within a bound.
It refuses to number, to interpret, and to go on silently: what can't be kept is a RecordingError, and the
caller still has the entries in the ring.
"""

from __future__ import annotations

from collections.abc import Iterable
from contextlib import ExitStack, suppress
from pathlib import Path

from daq.errors import RecordingError
from daq.stream.checkpoint import Checkpoint
from daq.stream.checkpoint_file import CheckpointFile
from daq.stream.entry import Entry, Packed, pack_all
from daq.stream.files import Files, OsFiles, told
from daq.stream.journal_reader import JournalReader
from daq.stream.journal_tail import Head, Tail, find_tail
from daq.stream.segment_writer import SegmentWriter
from daq.stream.segments import BODY_OFFSET, LOCK_NAME, first_chain, segment_numbers
from daq.stream.spares import Spares

__all__ = ["SEGMENT_BYTES", "UNSYNCED_BYTES_MAX", "Journal", "JournalReader"]

SEGMENT_BYTES = 16 << 20  # 2 min at 1 kHz, 10 s at 50 kHz
SEGMENT_BYTES_MIN = BODY_OFFSET + 1024
UNSYNCED_BYTES_MAX = 64 << 20  # half a minute at 50 kHz without one good sync: then the run must stop
_MIB = 1 << 20


class Journal:
    """Appends one stream's entries to a folder. One process at a time per folder (lock)."""

    def __init__(self, folder: Path, tail: Tail, stream_id: int, segment_bytes: int, files: Files) -> None:
        """Use create, resume or open."""
        self.folder = folder
        self.stream_id = stream_id
        self._files = files
        self._spares = Spares(folder, segment_bytes, files)
        self._writer = SegmentWriter(folder, tail, stream_id, self._spares, files)
        self._resumed = bool(tail.headers)
        self._checkpoint: CheckpointFile | None = None
        self._vouched = -1
        self._lock = -1

    # --- opening ------------------------------------------------------------------------------------------
    @classmethod
    def create(
        cls,
        folder: str | Path,
        stream_id: int,
        *,
        segment_bytes: int = SEGMENT_BYTES,
        files: Files | None = None,
    ) -> Journal:
        """A new journal. A folder that holds one already is refused."""
        files = files if files is not None else OsFiles()
        return cls._begin(Path(folder), stream_id, segment_bytes, files)

    @classmethod
    def resume(
        cls, folder: str | Path, *, segment_bytes: int = SEGMENT_BYTES, files: Files | None = None
    ) -> Journal:
        """Go on where a recorder ended, however it ended; `last_sequence` says where to go on reading."""
        files = files if files is not None else OsFiles()
        return cls._begin(Path(folder), None, segment_bytes, files)

    @classmethod
    def open(
        cls,
        folder: str | Path,
        stream_id: int,
        *,
        segment_bytes: int = SEGMENT_BYTES,
        files: Files | None = None,
    ) -> Journal:
        """Resume this stream's journal, or create it where there is none."""
        files = files if files is not None else OsFiles()
        with told(Path(folder)):
            there = bool(segment_numbers(files.names(Path(folder))))
        journal = cls._begin(Path(folder), None if there else stream_id, segment_bytes, files)
        if journal.stream_id != stream_id:
            journal._let_go()
            raise RecordingError(f"{folder} holds stream {journal.stream_id:#x}, not {stream_id:#x}")
        return journal

    @classmethod
    def _begin(cls, folder: Path, stream_id: int | None, segment_bytes: int, files: Files) -> Journal:
        """A stream id: create. None: resume."""
        assert segment_bytes >= SEGMENT_BYTES_MIN
        with told(folder):
            if stream_id is not None:
                files.make_folder(folder)
            with ExitStack() as undo:
                lock = _lock(folder, files)
                undo.callback(files.close, lock)
                tail = find_tail(folder, files) if stream_id is None else _no_tail(folder, stream_id, files)
                found = tail.headers[-1].stream_id if stream_id is None else stream_id
                journal = cls(folder, tail, found, segment_bytes, files)
                undo.pop_all()
            with ExitStack() as undo:
                undo.callback(journal._let_go)
                journal._lock = lock
                journal._settle()
                undo.pop_all()
        return journal

    def _settle(self) -> None:
        """Make the first segment of this life; everything found behind the acknowledged point is in it."""
        self._spares.clear()
        door = CheckpointFile.reopen if self._resumed else CheckpointFile.create
        self._checkpoint = door(self.folder, self._files)
        self._writer.renew()
        self._vouch()

    # --- facts --------------------------------------------------------------------------------------------
    @property
    def last_sequence(self) -> int:
        """Last entry appended; 0 = none."""
        return self._writer.appended.sequence

    @property
    def synced_sequence(self) -> int:
        """Last entry acknowledged: it outlives a power loss."""
        return self._writer.synced.sequence

    @property
    def chain(self) -> bytes:
        """SHA-256 over everything appended so far, in order."""
        return self._writer.appended.chain

    @property
    def faults(self) -> tuple[str, ...]:
        """Writes and syncs that failed in this life of the recorder, the latest hundred."""
        return tuple(self._writer.faults)

    @property
    def free_bytes(self) -> int:
        """Room that is filled with zeros already."""
        return self._writer.free_bytes + self._spares.free_bytes

    # --- writing ------------------------------------------------------------------------------------------
    def append(self, entries: Iterable[Entry]) -> None:
        """Entries with rising numbers, as one batch."""
        listed = list(entries)
        if listed:
            self.append_packed(pack_all(listed))

    def append_packed(self, packed: Packed) -> None:
        """The same for entries that are bytes already. On an error nothing was taken: append it again."""
        if packed.first_sequence <= self.last_sequence:
            raise self._refusal(f"entry {packed.first_sequence} after entry {self.last_sequence}")
        waiting = self._writer.unsynced_bytes
        if waiting + len(packed.data) > UNSYNCED_BYTES_MAX:
            raise self._refusal(f"{waiting / _MIB:.0f} MiB wait for a sync that succeeds")
        with told(self.folder, self.synced_sequence):
            self._writer.append(packed)

    def sync(self) -> int:
        """Make everything appended outlive a power loss; the last acknowledged sequence."""
        with told(self.folder, self.synced_sequence):
            self._writer.sync()
        self._vouch()
        self._keep_spare()
        return self.synced_sequence

    def prepare(self, bytes_ahead: int) -> None:
        """Fill room for that many bytes of batches now, or refuse with the arithmetic."""
        try:
            while self.free_bytes < bytes_ahead:
                self._spares.add()
        except OSError as error:
            needs, has = bytes_ahead / _MIB, self.free_bytes / _MIB
            raise self._refusal(
                f"journal needs {needs:.1f} MiB for the planned length, {self.folder} has {has:.1f} MiB "
                f"ready and gives no more: {error.strerror}"
            ) from error

    def delete_before(self, sequence: int) -> int:
        """Remove whole segments whose entries are all below `sequence`; how many went. The newest stays."""
        with told(self.folder, self.synced_sequence):
            return self._writer.delete_before(sequence)

    def __enter__(self) -> Journal:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Sync, mark the journal as ended, let go of it. The handles go whatever happens; twice is once."""
        if self._lock < 0:
            return
        try:
            self.sync()
            self._vouch(closed=True)
            with told(self.folder, self.synced_sequence):
                self._spares.clear()
        finally:
            self._let_go()

    # --- beside the way -----------------------------------------------------------------------------------
    def _vouch(self, *, closed: bool = False) -> None:
        """A checkpoint. It only ever lags behind: a fault costs a restart some scanning and nothing else."""
        file, synced = self._checkpoint, self._writer.synced
        assert file is not None and self._writer.unsynced_bytes == 0
        if self._vouched == synced.sequence and not closed:
            return
        number, offset = self._writer.place
        point = Checkpoint(
            counter=file.counter + 1,
            stream_id=self.stream_id,
            segment=number,
            offset=offset,
            sequence=synced.sequence,
            chain=synced.chain,
            closed=closed,
        )
        try:
            file.write(point)
            if closed:
                file.sync()
            self._vouched = point.sequence
        except OSError as error:
            self._writer.faults.append(f"checkpoint: {error.strerror}")

    def _keep_spare(self) -> None:
        """Have the next segment ready once this one is half used; a fault hurts only if it lasts."""
        if len(self._spares) == 0 and self._writer.half_used:
            try:
                self._spares.add()
            except OSError as error:
                self._writer.faults.append(f"spare segment: {error.strerror}")

    def _refusal(self, message: str) -> RecordingError:
        return RecordingError(message, last_sequence=self.synced_sequence)

    def _let_go(self) -> None:
        self._writer.let_go()
        with suppress(OSError):
            if self._checkpoint is not None:
                self._checkpoint.close()
        with suppress(OSError):
            self._files.close(self._lock)
        self._lock = -1


def _lock(folder: Path, files: Files) -> int:
    try:
        return files.lock(folder / LOCK_NAME)
    except BlockingIOError as error:
        raise RecordingError(f"journal {folder} is written by another process") from error


def _no_tail(folder: Path, stream_id: int, files: Files) -> Tail:
    if segment_numbers(files.names(folder)):
        raise RecordingError(f"{folder} holds a journal already: resume it")
    start = Head(0, first_chain(stream_id))
    return Tail([], start, start, [])
