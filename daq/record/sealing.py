"""Sealing: everything between a finished run and its record under its final name, in the order that
survives a kill.

Room asked for, reduced, written to a new file, synced, linked to a free name, read back, listed in
SHA256SUMS. A name that is taken is never overwritten and a run is never sealed twice.
"""

from __future__ import annotations

import os
import time
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, TypeAlias

import numpy as np

from daq.errors import RecordDamaged, RecordingError
from daq.record.columns import Columns
from daq.record.head import Head
from daq.record.mark import sync_folder
from daq.record.publish import add_sum, make_folder, publish_new, read_sums, sha256_of
from daq.record.read import read_meta
from daq.record.seal import Before, Outcome, write_record
from daq.record.verify import check_contents
from daq.stream.rundata import RunData

Reduce: TypeAlias = Callable[[RunData], Mapping[str, Any]]

TEXT_ROOM_BYTES = 4 << 20  # events, cards, result and seal of a record, beyond its columns and its trace
NAMES_MAX = 100
DAMAGED_ENDING = ".damaged"


class NoRoom(RecordingError):
    """The disk has less room than the record may take; the journal keeps the run meanwhile."""


@dataclass(frozen=True, slots=True)
class Sealed:
    """A record under its name. result: as sealed, without the trace."""

    path: Path
    head: Head
    interrupted: bool
    sha256: str
    result: Mapping[str, Any]
    failure: str = ""
    renamed: bool = False  # its own name was taken
    seal_s: float = 0.0

    def as_report(self) -> dict[str, Any]:
        return {
            "report": "sealed",
            "path": str(self.path),
            "run_id": self.head.run_id,
            "series": self.head.series,
            "specimen": self.head.specimen,
            "loading": self.head.loading,
            "simulated": self.head.simulated,
            "interrupted": self.interrupted,
            "sha256": self.sha256,
            "result": {"failure": self.failure} if self.failure else dict(self.result),
            "renamed": self.renamed,
            "seal_s": self.seal_s,
        }


class Sealing:
    """Seals runs below one out folder: <out>/<series>/<series>_<specimen>_<loading>.h5."""

    def __init__(self, out_folder: Path, reduce: Reduce, pulse: Callable[[], object]) -> None:
        self._out = out_folder
        self._reduce = reduce
        self._pulse = pulse

    def find(self, head: Head) -> Sealed | None:
        """The record of that run, if it is sealed already; what a kill cut off after its naming is made good."""
        for path in self._names(head):
            if not path.exists():
                return None
            try:
                meta = read_meta(path)
            except RecordDamaged:
                continue  # not ours to judge here: the name is taken, verify tells why
            if meta["run_id"] == head.run_id:
                self._temp(head).unlink(missing_ok=True)
                sync_folder(path.parent)
                add_sum(path.parent, meta["sha256"], path.name)
                result = meta["result"]
                return Sealed(
                    path, head, meta["interrupted"], meta["sha256"], result, result.get("failure", "")
                )
        return None

    def seal(self, columns: Columns, journal_chain: str) -> Sealed:
        """OSError or RecordingError where it cannot be done now; then nothing is left behind."""
        begun_s = time.monotonic()
        head = columns.head
        before = self.find(head)
        if before is not None:
            return before  # an earlier attempt had given it its name when the disk refused what comes after
        folder = self._out / head.series
        make_folder(folder)
        _demand_room(folder, columns.size_bytes() + TEXT_ROOM_BYTES + 16 * _rows(columns))
        outcome = self._outcome(columns)
        temp = self._temp(head)
        temp.unlink(missing_ok=True)
        write_record(temp, columns, outcome, self._before(folder, journal_chain), pulse=self._pulse)
        path = self._publish(temp, head)
        digest = self._read_back(path)
        add_sum(folder, digest, path.name)
        return Sealed(
            path,
            head,
            columns.rows.interrupted,
            digest,
            outcome.result,
            outcome.failure,
            renamed=path.stem != head.stem,
            seal_s=time.monotonic() - begun_s,
        )

    def _outcome(self, columns: Columns) -> Outcome:
        try:
            result = dict(self._reduce(columns.run_data()))
            trace = {
                name: np.asarray(values, dtype="<f8")
                for name, values in (result.pop("trace", None) or {}).items()
            }
        except Exception as error:  # noqa: BLE001 - whatever the reduction does, the record must not be lost
            return Outcome(failure=f"{type(error).__name__}: {error}")
        return Outcome(result, trace)

    def _before(self, folder: Path, journal_chain: str) -> Before:
        sums = read_sums(folder)
        digest, name = sums[-1] if sums else ("", "")
        return Before(name, digest, journal_chain)

    def _publish(self, temp: Path, head: Head) -> Path:
        for path in self._names(head):
            try:
                publish_new(temp, path)
            except FileExistsError:
                continue
            return path
        raise RecordingError(
            f"{NAMES_MAX} files of the name {head.stem} stand in {temp.parent}: move them away"
        )

    def _temp(self, head: Head) -> Path:
        return self._out / head.series / f".{head.stem}.{head.run_id[:8]}.part"

    def _names(self, head: Head) -> Iterator[Path]:
        folder = self._out / head.series
        yield folder / f"{head.stem}.h5"
        for number in range(2, NAMES_MAX):
            yield folder / f"{head.stem}-{head.run_id[:8]}-{number}.h5"

    def _read_back(self, path: Path) -> str:
        """SHA-256 of the whole file, once it has been found to hold what was written."""
        report = check_contents(path, entries=False, pulse=self._pulse)
        if not report.ok:
            os.replace(path, path.with_name(path.name + DAMAGED_ENDING))
            raise RecordingError(
                f"{path.name} does not read back as written ({report.first_bad}); kept as {DAMAGED_ENDING}"
            )
        return sha256_of(path)


def _rows(columns: Columns) -> int:
    return sum(columns.rows.rows_of(place) for place in range(len(columns.head.sources)))


def _demand_room(folder: Path, needed_bytes: int) -> None:
    disk = os.statvfs(folder)
    free_bytes = disk.f_bavail * disk.f_frsize
    if free_bytes < needed_bytes:
        raise NoRoom(
            f"the record needs up to {needed_bytes / 1e6:.0f} MB, "
            f"{folder} has {free_bytes / 1e6:.0f} MB free: make room"
        )
