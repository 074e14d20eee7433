"""Recorder: the process that takes the stream from the ring to the journal. Standard library and
daq.stream only.

Reads every 20 ms, syncs every 100 ms, acknowledges to the ring after each sync and never before; what it
says there is how far behind it is, not that it lives. After a restart it goes on behind the journal's last
entry. What the disk refuses stays in the ring, which holds a minute, and is told.
"""

from __future__ import annotations

import os
import time
from collections import deque
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, TypeAlias

from daq.errors import RecordingError
from daq.record.mark import read_mark
from daq.stream.entry import Packed
from daq.stream.files import Files
from daq.stream.journal import SEGMENT_BYTES, Journal
from daq.stream.ring_file import RingAbsent
from daq.stream.ring_reader import RingReader, drain

Report: TypeAlias = Callable[[Mapping[str, Any]], None]

SECOND_NS = 1_000_000_000
POLL_S = 0.02
SYNC_NS = SECOND_NS // 10
STATUS_NS = SECOND_NS // 2
TIDY_NS = SECOND_NS
KEEP_NS = 60 * SECOND_NS
FINISH_NS = 5 * SECOND_NS  # at the end: how long the disk may take with what is left; the ring keeps the rest
PIECES_MAX = 64  # of 256 KiB each: a sync is never further away than that


def run_recorder(
    ring_path: Path,
    journal_folder: Path,
    report: Report,
    should_stop: Callable[[], bool],
    *,
    bytes_ahead: int = 0,
    files: Files | None = None,
) -> str:
    """Body of the process. Ends after should_stop, with everything in the ring safely in the journal: then "".

    Otherwise the line that says what is left in the ring, why, and what to do: the ring must stay.
    bytes_ahead: room kept filled with zeros for what the planned run will write.
    """
    recorder = Recorder(ring_path, journal_folder, report, bytes_ahead=bytes_ahead, files=files)
    try:
        while not should_stop():
            recorder.advance(time.monotonic_ns())
            time.sleep(POLL_S)
    finally:
        left = recorder.finish(time.monotonic_ns)
    return left


class Recorder:
    """Advance it again and again; a disk that refuses is told and asked again, it never raises for that."""

    def __init__(
        self,
        ring_path: Path,
        journal_folder: Path,
        report: Report,
        *,
        bytes_ahead: int = 0,
        files: Files | None = None,
    ) -> None:
        self._journal = open_journal(ring_path, journal_folder, files)
        self._reader = RingReader(ring_path, after_sequence=self._journal.last_sequence)
        self._ring_path = ring_path
        self._folder = journal_folder
        self._report = report
        self._bytes_ahead = bytes_ahead
        self._pending: Packed | None = None
        self._history: deque[tuple[int, int]] = deque()
        self._taken_ns = (
            0  # everything given to the ring before this instant is in the journal, synced or not
        )
        self._safe_ns = self._reader.acked_ns  # the same, synced; 0 = nothing yet
        self._begun_ns = 0
        self._synced_ns = self._said_ns = self._tidied_ns = 0
        self._trouble = ""
        self._bytes = 0

    def advance(self, now_ns: int) -> bool:
        """Take what is in the ring; sync, tidy and report when it is time. Whether the ring was emptied."""
        self._begun_ns = self._begun_ns or now_ns
        try:
            drained = self._take()
            if drained:
                self._taken_ns = now_ns
            if now_ns - self._synced_ns >= SYNC_NS:
                self._sync(now_ns)
            if now_ns - self._tidied_ns >= TIDY_NS:
                self._tidied_ns = now_ns
                self._tidy(now_ns)
            self._trouble = ""
        except RecordingError as error:
            self._trouble = str(error)
            drained = False
        self._say(now_ns)
        return drained

    def _take(self) -> bool:
        for _ in range(PIECES_MAX):
            if self._pending is None:
                self._pending = self._reader.read_packed()
            if self._pending is None:
                return True
            self._journal.append_packed(self._pending)
            self._taken_ns = max(self._taken_ns, self._pending.newest_ns)
            self._bytes += len(self._pending.data)
            self._pending = None
        return False

    def _sync(self, now_ns: int) -> None:
        self._journal.sync()
        self._synced_ns = now_ns
        self._safe_ns = max(self._safe_ns, self._taken_ns)
        self._reader.acknowledge(self._journal.synced_sequence, self._safe_ns)

    def _tidy(self, now_ns: int) -> None:
        """Let segments go that are older than a minute and of no use to the archivist; fill room ahead."""
        self._history.append((now_ns, self._journal.last_sequence))
        while len(self._history) > 1 and self._history[1][0] <= now_ns - KEEP_NS:
            self._history.popleft()
        mark = read_mark(self._folder)
        if mark is not None and self._history[0][0] <= now_ns - KEEP_NS:
            self._journal.delete_before(min(mark.needed_from, self._history[0][1]))
        if self._journal.free_bytes < self._bytes_ahead:
            self._journal.prepare(min(self._bytes_ahead, self._journal.free_bytes + SEGMENT_BYTES // 2))

    def _say(self, now_ns: int) -> None:
        if now_ns - self._said_ns < STATUS_NS:
            return
        self._said_ns = now_ns
        self._report(
            {
                "report": "status",
                "sequence": self._journal.last_sequence,
                "synced_sequence": self._journal.synced_sequence,
                "lag_s": (now_ns - (self._safe_ns or self._begun_ns)) / SECOND_NS,
                "lag_bytes": self._reader.lag_bytes,
                "bytes": self._bytes,
                "room_bytes": self._journal.free_bytes,
                "lost_entries": self._reader.lost_entries,
                "overtaken": self._reader.overtaken,
                "faults": list(self._journal.faults[-3:]),
                "flagged": bool(self._journal.faults),
                "trouble": self._trouble,
            }
        )

    def finish(self, clock_ns: Callable[[], int]) -> str:
        """Empty the ring, sync, acknowledge, close; for at most FINISH_NS. The line of what is left; "" = nothing."""
        until_ns = clock_ns() + FINISH_NS
        while not self.advance(clock_ns()) and clock_ns() < until_ns:
            time.sleep(POLL_S)
        try:
            self._journal.close()
            self._safe_ns = max(self._safe_ns, self._taken_ns)
        except RecordingError as error:
            self._trouble = str(error)
        self._reader.acknowledge(self._journal.synced_sequence, self._safe_ns)
        self._said_ns = 0
        self._say(clock_ns())
        self._reader.close()
        left_bytes = unsafe_bytes(self._ring_path)
        return left_line(self._ring_path, self._folder, left_bytes, self._trouble) if left_bytes else ""


def unsafe_bytes(ring_path: Path) -> int:
    """Bytes in a ring that no journal is known to hold; 0 where there is no ring."""
    try:
        reader = RingReader(ring_path)  # begins at the acknowledged position
    except RingAbsent:
        return 0
    try:
        return reader.lag_bytes
    finally:
        reader.close()


def left_line(ring_path: Path, journal_folder: Path, left_bytes: int, why: str) -> str:
    """What a person has to know and do while data lie in memory only."""
    return (
        f"{left_bytes / 1e6:.1f} MB are not on disk yet{f' ({why})' if why else ''}; they stay in {ring_path}, which is"
        f" memory and LOST WITH A REBOOT: make room, then start `midspan serve` again or call"
        f" `midspan recover {journal_folder}`"
    )


def open_journal(ring_path: Path, journal_folder: Path, files: Files | None = None) -> Journal:
    """The journal of that ring's stream: resumed, or new."""
    reader = RingReader(ring_path)
    stream_id = reader.stream_id
    reader.close()
    return Journal.open(journal_folder, stream_id, files=files)


def drain_ring(ring_path: Path, journal_folder: Path) -> int:
    """Bring what a dead bench left in its ring into its journal, then remove the ring. How many entries."""
    journal = open_journal(ring_path, journal_folder)
    try:
        count = 0
        for packed in drain(ring_path, after_sequence=journal.last_sequence):
            journal.append_packed(packed)
            count += packed.count
    finally:
        journal.close()
    os.unlink(ring_path)
    return count
