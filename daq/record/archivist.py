"""Archivist: the process that follows the journal, shows each run in a live file, and seals its record at
the close.

It may be killed at any moment: what it has to do stands in the journal and in its mark, and what it has
done stands on disk under final names. It never overwrites a file, and never lets a failing reduction, live
file or copy cost a record.

Reports, each a mapping with "report": "recovering" (behind, after a start), "status", "sealed"
(sealing.Sealed), "waits" (why nothing can be sealed now), "live_given_up", "copied", "copy_failed".
"""

from __future__ import annotations

import fcntl
import os
import shutil
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any, TypeAlias

from daq.errors import MidspanError, RecordDamaged, RecordingError
from daq.record.columns import Columns
from daq.record.copier import Copied, Copier
from daq.record.follow import Ended, Follower, Found, Opened, Within
from daq.record.live import LiveFile
from daq.record.mark import COPIES_MAX, Mark, read_mark, write_mark
from daq.record.sealing import Reduce, Sealed, Sealing
from daq.stream.entry import Packed
from daq.stream.journal_reader import JournalReader

Report: TypeAlias = Callable[[Mapping[str, Any]], None]

POLL_S = 0.02
SHOW_S = 0.15  # live file: 6 to 7 flushes a second
STATUS_S = 0.5
MARK_S = 10.0  # between runs; at a close at once
RETRY_S = 2.0
COPY_WAIT_S = 5.0
LOCK_NAME = "archivist.lock"


def run_archivist(
    journal_folder: Path,
    out_folder: Path,
    spool_folder: Path,
    reduce: Reduce,
    report: Report,
    should_stop: Callable[[], bool],
    copy_to: Path | None = None,
) -> None:
    """Body of the process. Ends after should_stop, once all that is in the journal has been followed."""
    with Archivist(
        journal_folder, out_folder, spool_folder, reduce, report, copy_to=copy_to, pulse=should_stop
    ) as archivist:
        while True:
            stopping = should_stop()
            if archivist.advance(time.monotonic()):
                continue
            if stopping:
                return
            time.sleep(POLL_S)


class Archivist:
    """Advance it again and again; each call follows one piece of the journal or attempts one seal."""

    def __init__(
        self,
        journal_folder: Path,
        out_folder: Path,
        spool_folder: Path,
        reduce: Reduce,
        report: Report,
        *,
        copy_to: Path | None = None,
        pulse: Callable[[], object] = bool,
        stream_is_dead: bool = False,
        afresh: bool = False,
    ) -> None:
        self._journal = journal_folder
        self._out = out_folder
        self._spool = spool_folder
        self._report = report
        self._stream_is_dead = stream_is_dead
        self._pulse = pulse
        self._sealing = Sealing(out_folder, reduce, self._pulse_and_say)
        self._lock = _lock(journal_folder)
        self._mark = read_mark(journal_folder) or Mark(0, 0)
        if afresh:
            self._mark = replace(self._mark, needed_from=0)
        if copy_to is not None:
            self._mark = replace(self._mark, copy_to=str(copy_to))
        to = self._mark.copy_to
        self._copier = Copier(out_folder, Path(to)) if to else None
        self.damage = ""  # of the journal, where its stream is dead: what lies behind it is out of reach
        self._columns: Columns | None = None
        self._live: LiveFile | None = None
        self._owed: Columns | None = None  # ended, not sealed yet
        self._sealed_before: Sealed | None = None  # the open run's record, found on disk
        self._caught_up = False
        self.trouble = ""  # why nothing can be sealed at present
        self._retry_s = float("-inf")
        self._showed_s = self._said_s = self._marked_s = float("-inf")
        self._begin()

    def _begin(self) -> None:
        """Read the journal from where the mark says something may still be needed."""
        self._reader = JournalReader(self._journal, after_sequence=max(0, self._mark.needed_from - 1))
        self._follower = Follower()
        self._found: Iterator[Found] = iter(())
        self._caught_up = False

    def __enter__(self) -> Archivist:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Let go. An open run stays in the journal for the next archivist, or for recovery."""
        if self._copier is not None:
            self._copier.wait(COPY_WAIT_S)
            self._note_copies(self._copier.take())
        self._drop()
        self._reader.close()
        os.close(self._lock)

    @property
    def copying(self) -> bool:
        """Whether owed copies are being made at this moment, or were made and are not yet noted."""
        return self._copier is not None and self._copier.busy

    @property
    def copies_owed(self) -> int:
        return len(self._mark.copies)

    # --- following ------------------------------------------------------------------------------------------
    def advance(self, now_s: float) -> bool:
        """Whether there was something to do; False = look again later."""
        busy = False
        try:
            if now_s >= self._retry_s:
                busy = self._seal_owed() if self._owed is not None else self._follow()
                self._show(now_s)
            self._copy(now_s)
            self._note_progress(now_s)
        except (OSError, MidspanError) as error:
            self._start_over(str(error), now_s)
            return False
        return busy

    def _follow(self) -> bool:
        for found in self._found:
            self._handle(found)
            if self._owed is not None:
                return True
        packed = self._next_piece()
        if packed is None:
            self._caught_up = True
            return self._stream_is_dead and self._end_of_journal()
        self._found = self._follower.feed(packed)
        return True

    def _next_piece(self) -> Packed | None:
        try:
            return self._reader.read_packed()
        except RecordDamaged as error:
            if not self._stream_is_dead:
                raise
            self.damage = str(error)
            return None

    def _handle(self, found: Found) -> None:
        if isinstance(found, Opened):
            self._open(found)
        elif isinstance(found, Within):
            if self._columns is not None:
                self._columns.add(found.entry, found.packed)
        else:
            self._end(found)

    def _open(self, opened: Opened) -> None:
        self._sealed_before = self._sealing.find(opened.head)
        folder = self._spool / f"run-{opened.head.run_id}"
        if self._sealed_before is not None:
            shutil.rmtree(folder, ignore_errors=True)  # of a process killed between the seal and its tidying
            return
        self._columns = Columns(folder, opened.head, opened.lead_in)
        if self._caught_up:  # a run that began before this process did gets no second live file
            self._live = LiveFile(folder / f"{opened.head.stem}.live.h5", opened.head)

    def _end(self, ended: Ended) -> None:
        if self._columns is None:
            assert self._sealed_before is not None
            self._finished(self._sealed_before, ended.after_sequence)
            return
        self._columns.finish()
        if self._live is not None:
            self._live.close()
            self._live = None
        self._owed, self._columns = self._columns, None

    def _end_of_journal(self) -> bool:
        """The stream is dead: an open run ends here. Whether there was one."""
        if not self._follower.open:
            return False
        self._follower.open = False
        self._end(Ended(self._follower.last_sequence, closed=False))
        return True

    # --- the close ------------------------------------------------------------------------------------------
    def _seal_owed(self) -> bool:
        assert self._owed is not None
        sealed = self._sealing.seal(self._owed, self._reader.chain.hex())
        self._owed.remove()
        last_sequence = self._owed.span.last_sequence
        self._owed = None
        self.trouble = ""
        self._finished(sealed, last_sequence)
        return True

    def _finished(self, sealed: Sealed, last_sequence: int) -> None:
        owed = self._mark.copies
        name = str(sealed.path.relative_to(self._out))
        if self._copier is not None and name not in owed:
            owed = (*owed, name)[-COPIES_MAX:]
        self._set_mark(last_sequence + 1, owed)
        self._report(sealed.as_report())

    def _set_mark(self, needed_from: int, copies: tuple[str, ...]) -> None:
        stream_id = self._reader.stream_id or self._mark.stream_id
        mark = Mark(stream_id, needed_from, copies, self._mark.copy_to)
        if mark != self._mark:
            write_mark(self._journal, mark)
            self._mark = mark

    # --- beside ---------------------------------------------------------------------------------------------
    def _show(self, now_s: float) -> None:
        if self._columns is None or now_s - self._showed_s < SHOW_S:
            return
        self._showed_s = now_s
        taken = self._columns.settle()
        if self._live is not None:
            self._live.show(taken)
            if self._live.trouble:
                self._report({"report": "live_given_up", "why": self._live.trouble})
                self._live = None

    def _copy(self, now_s: float) -> None:
        if self._copier is not None:
            self._note_copies(self._copier.advance(self._mark.copies, now_s))

    def _note_copies(self, done: Sequence[Copied]) -> None:
        for copied in done:
            if copied.trouble:
                self._report({"report": "copy_failed", "path": str(copied.target), "why": copied.trouble})
                continue
            left = tuple(name for name in self._mark.copies if name != copied.name)
            self._set_mark(self._mark.needed_from, left)
            self._report({"report": "copied", "path": str(copied.target)})

    def _note_progress(self, now_s: float) -> None:
        if not self._follower.open and self._owed is None and now_s - self._marked_s >= MARK_S:
            self._marked_s = now_s
            self._set_mark(max(self._mark.needed_from, self._follower.needed_from), self._mark.copies)
        self._say(now_s)

    def _pulse_and_say(self) -> None:
        """While a long record is being sealed: we live, and the run in hand is known to a station that comes up now."""
        self._pulse()
        self._say(time.monotonic())

    def _say(self, now_s: float) -> None:
        if now_s - self._said_s < STATUS_S:
            return
        self._said_s = now_s
        self._report(
            {
                "report": "status" if self._caught_up else "recovering",
                "sequence": self._follower.last_sequence,
                "run": self._run_in_hand(),
                "copies_owed": self.copies_owed,
                "trouble": self.trouble,
            }
        )

    def _run_in_hand(self) -> dict[str, Any] | None:
        """The run that is no record yet: still open, or ended and owed."""
        columns = self._owed or self._columns
        if columns is None:
            return None
        head = columns.head
        return {
            "run_id": head.run_id,
            "series": head.series,
            "specimen": head.specimen,
            "loading": head.loading,
            "closed": self._owed is not None,
            "interrupted": columns.rows.interrupted,
        }

    # --- trouble --------------------------------------------------------------------------------------------
    def _start_over(self, why: str, now_s: float) -> None:
        """The disk refused: wait, then take up the run again from the journal. An owed run stays owed."""
        where = f"sealing in {self._out}" if self._owed is not None else f"following in {self._spool}"
        self.trouble = why = f"{where}: {why}"
        self._retry_s = now_s + RETRY_S
        self._report({"report": "waits", "why": why})
        if self._owed is None:
            self._drop()
            self._reader.close()
            self._begin()

    def _drop(self) -> None:
        if self._live is not None:
            self._live.close()
            self._live = None
        for columns in (self._columns, self._owed):
            if columns is not None:
                columns.remove()
        self._columns = self._owed = None


def _lock(journal_folder: Path) -> int:
    """One archivist a journal; the lock ends with the process, however that ends."""
    descriptor = os.open(journal_folder / LOCK_NAME, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o600)
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError as error:
        os.close(descriptor)
        raise RecordingError(f"{journal_folder} is being archived by another process") from error
    return descriptor
