"""Recover: seal what the journal of a dead stream still holds, then let the journal go. Idempotent; may be
killed.

It is the archivist's own work on a stream that will not go on, so the records come out the same byte for
byte. It refuses a journal whose recorder lives.
"""

from __future__ import annotations

import os
import shutil
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from daq.errors import RecordingError
from daq.record.archivist import POLL_S, Archivist, Report
from daq.record.sealing import Reduce
from daq.stream.files import OsFiles
from daq.stream.segments import LOCK_NAME

COPY_PATIENCE_S = 60.0
SCRATCH_NAME = "rebuilding"


def recover(
    journal_folder: Path,
    out_folder: Path,
    *,
    reduce: Reduce,
    report: Report = lambda _: None,
    pulse: Callable[[], object] = bool,
    keep: bool = False,
    afresh: bool = False,
) -> tuple[Path, ...]:
    """The records of that journal, sealed now or before. RecordingError where the disk takes none now.

    afresh: also runs that were sealed before, where their records are gone from the out folder.
    The journal is removed, unless `keep`, a damage of it or a copy that is still owed speaks against it.
    """
    records: list[Path] = []

    def note(said: Mapping[str, Any]) -> None:
        if said["report"] == "sealed":
            records.append(Path(said["path"]))
        report(said)

    if not journal_folder.is_dir():
        raise RecordingError(f"no journal at {journal_folder}")
    with _sole_owner(journal_folder):
        with Archivist(
            journal_folder,
            out_folder,
            journal_folder / SCRATCH_NAME,
            reduce,
            note,
            pulse=pulse,
            stream_is_dead=True,
            afresh=afresh,
        ) as archivist:
            _finish(archivist, pulse)
            damage, owed = archivist.damage, archivist.copies_owed
        if damage:
            report({"report": "journal_damaged", "path": str(journal_folder), "why": damage})
        elif not keep and not owed:
            shutil.rmtree(journal_folder)
    return tuple(records)


def _finish(archivist: Archivist, pulse: Callable[[], object]) -> None:
    """Follow to the end, then give owed copies their time."""
    patience_until_s = time.monotonic() + COPY_PATIENCE_S
    while True:
        pulse()
        busy = archivist.advance(time.monotonic())
        if archivist.trouble:
            raise RecordingError(archivist.trouble)
        if busy:
            patience_until_s = time.monotonic() + COPY_PATIENCE_S
        elif not archivist.copying or time.monotonic() > patience_until_s:
            return
        else:
            time.sleep(POLL_S)


@contextmanager
def _sole_owner(journal_folder: Path) -> Iterator[None]:
    try:
        handle = OsFiles().lock(journal_folder / LOCK_NAME)
    except BlockingIOError as error:
        raise RecordingError(f"{journal_folder} is being written by a living recorder") from error
    try:
        yield
    finally:
        os.close(handle)
