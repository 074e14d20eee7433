"""Verify: whether a record is what was sealed, and which part is damaged first.

Three looks, each independent of the one before: the file's bytes against its first block (no HDF5
involved), every object against the seal's list, and the entries against themselves, against the columns
and against the bench's own count. HDF5 is opened in a child process with limits of time and memory,
because a crafted file can hang or crash the library. Run as a module with a path it is that child: one
JSON report on standard output.
"""

from __future__ import annotations

import json
import os
import resource
import subprocess
import sys
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from daq.errors import RecordDamaged
from daq.record.digest import OWN_DIGEST, address, describe_object, first_difference, seal_digest, walk
from daq.record.head import Head, head_of_entry
from daq.record.read import check_bytes, open_unchecked, stream_entries
from daq.record.rows import COUNTED, OPENED, GapKind, Rows, RunRows, is_event
from daq.record.schema import H5_ERRORS
from daq.record.texts import H5, plain_text
from daq.stream.entry import EntryDamaged
from daq.stream.payloads import unpack_event

PROBLEMS_MAX = 100
CHILD_MEMORY_BYTES = 2 << 30
CHILD_SECONDS_LEAST = 10.0
CHILD_BYTES_PER_S = 3e5  # a twelfth of what was measured with entries of one millisecond
COMPARE_ENTRIES = 20_000


@dataclass(frozen=True, slots=True)
class Report:
    """problems: one line each, in the order found; the first names the first damaged place."""

    path: str
    problems: tuple[str, ...] = ()
    entries: int = 0
    rows: int = 0
    events: int = 0
    gaps: int = 0
    accounted: bool = False  # the bench's own count was there and agreed

    @property
    def ok(self) -> bool:
        return not self.problems

    @property
    def first_bad(self) -> str:
        return self.problems[0] if self.problems else ""


def verify(path: Path) -> Report:
    """All looks; the child is also asked about a file whose bytes have changed, to say where."""
    try:
        check_bytes(path)
    except RecordDamaged as error:
        if error.first_bad != "bytes":
            return Report(str(path), (str(error),))
        inside = _in_child(path)
        return replace(
            inside, problems=inside.problems or (f"{path}: bytes outside the content were altered",)
        )
    return _in_child(path)


def _in_child(path: Path) -> Report:
    limit_s = CHILD_SECONDS_LEAST + path.stat().st_size / CHILD_BYTES_PER_S
    command = [sys.executable, "-m", "daq.record.verify", str(path)]
    try:
        done = subprocess.run(command, capture_output=True, timeout=limit_s, check=False)
        found = json.loads(done.stdout)
        return Report(**{**found, "problems": tuple(found["problems"])})
    except subprocess.TimeoutExpired:
        return Report(str(path), (f"HDF5 structure: reading took longer than {limit_s:.0f} s and was ended",))
    except (ValueError, KeyError, TypeError):
        return Report(str(path), (f"HDF5 structure: the reading process ended with code {done.returncode}",))


def check_contents(path: Path, *, entries: bool = True, pulse: Callable[[], object] = bool) -> Report:
    """Seal list, entries, columns and count, in this process: for a file just written, or inside the child.

    entries=False: the seal's list alone, which is all that can differ in a file written a moment ago.
    """
    try:
        with open_unchecked(path) as file:
            return _Checker(file, str(path), pulse).report(entries)
    except RecordDamaged as error:
        return Report(str(path), (f"{error.first_bad}: {error}",))


class _TooMany(Exception):
    pass


class _Checker:
    def __init__(self, file: H5, path: str, pulse: Callable[[], object]) -> None:
        self._file = file
        self._pulse = pulse
        self._path = path
        self._problems: list[str] = []
        self._entries = 0
        self._accounted = False

    def report(self, entries: bool) -> Report:
        rows: RunRows | None = None
        try:
            self._check_objects()
            rows = self._check_entries() if entries else None
        except _TooMany:
            pass
        except H5_ERRORS as error:
            self._problems.append(f"HDF5 structure: {error}")
        return Report(
            self._path,
            tuple(self._problems),
            entries=self._entries,
            rows=sum(rows.rows_of(place) for place in range(len(rows.head.sources))) if rows else 0,
            events=len(rows.events) if rows else 0,
            gaps=len(rows.gaps) if rows else 0,
            accounted=self._accounted,
        )

    def _bad(self, problem: str) -> None:
        self._problems.append(problem)
        if len(self._problems) >= PROBLEMS_MAX:
            raise _TooMany

    # Objects against the seal's list ---------------------------------------------------------------------

    def _check_objects(self) -> None:
        promised = self._check_seal()
        found: set[str] = set()
        good: set[tuple[int, str]] = set()
        for path, item in walk(self._file):
            found.add(path)
            self._pulse()
            if path not in promised:
                self._bad(f"{path}: not in the seal's list")
            else:
                self._check_object(path, item, promised[path], good)
        for path in sorted(promised.keys() - found):
            self._bad(f"{path}: missing")

    def _check_seal(self) -> dict[str, Any]:
        """The seal's own digest; what it lists."""
        seal = self._file["seal"]
        listed = plain_text(seal["list"][()])
        words = {name: plain_text(text) for name, text in seal.attrs.items()}
        if words.pop(OWN_DIGEST, "") != seal_digest(words, listed) or list(seal) != ["list"]:
            self._bad("/seal: altered")
        promised: dict[str, Any] = json.loads(listed)
        return promised

    def _check_object(
        self, path: str, item: H5, promised: dict[str, Any], good: set[tuple[int, str]]
    ) -> None:
        described = describe_object(item)
        differing = [key for key, value in described.items() if promised.get(key) != value]
        if differing:
            self._bad(f"{path}: {', '.join(differing)} altered")
        key = (address(item), promised.get("sha256", ""))
        if "sha256" not in promised or "dtype" in differing or "shape" in differing or key in good:
            return
        where = first_difference(item, promised)
        if where is None:
            good.add(key)
        else:
            self._bad(f"{path}: {where}")

    # Entries against themselves and the columns ----------------------------------------------------------

    def _check_entries(self) -> RunRows | None:
        """CRC, order and identity of every entry, and every column rebuilt from the BLOCK entries."""
        dataset = self._file["stream"]
        stream_id, opened = int(dataset.attrs["stream_id"]), int(dataset.attrs["opened_sequence"])
        rows: RunRows | None = None
        compare: _Columns | None = None
        last, place = -1, 0
        try:
            for entry, place in stream_entries(dataset):
                self._entries += 1
                if entry.stream_id != stream_id or entry.sequence <= last:
                    self._bad(
                        f"/stream byte {place}: entry {entry.sequence} of {entry.stream_id:#x} after {last}"
                    )
                last = entry.sequence
                if entry.sequence == opened and is_event(entry, OPENED):
                    rows = RunRows(head_of_entry(entry))
                    compare = _Columns(self._file, rows.head)
                if rows is not None and compare is not None:
                    rows.feed(entry)
                    if is_event(entry, COUNTED):
                        self._check_count(rows, unpack_event(entry.payload))
                    if self._entries % COMPARE_ENTRIES == 0:
                        self._compare(compare, rows.take())
        except EntryDamaged as error:
            self._bad(f"/stream after byte {place} (sequence {last}): {error.why}")
            return None
        if rows is None or compare is None:
            self._bad(f"/stream: no {OPENED} with sequence {opened}")
            return None
        self._compare(compare, rows.take())
        self._check_ends(rows, compare, last)
        return rows

    def _compare(self, columns: _Columns, taken: Sequence[Rows]) -> None:
        for rows in taken:
            for problem in columns.differences(rows):
                self._bad(problem)

    def _check_ends(self, rows: RunRows, columns: _Columns, last: int) -> None:
        attrs = self._file["stream"].attrs
        if int(attrs["last_sequence"]) != last or int(attrs["entries"]) != self._entries:
            self._bad(f"/stream: ends with sequence {last} after {self._entries} entries, sealed otherwise")
        for problem in columns.lengths():
            self._bad(problem)
        events = [json.loads(plain_text(row)) for row in self._file["events"]["json"][:]]
        if events != rows.events:
            differing = (
                place
                for place, pair in enumerate(zip(events, rows.events, strict=False))
                if pair[0] != pair[1]
            )
            self._bad(
                f"/events: row {next(differing, min(len(events), len(rows.events)))} differs from /stream"
            )
        lost = sum(gap.missing for gap in rows.gaps if gap.kind is GapKind.ENTRIES)
        if lost and not any(event.get("event") == "ring_loss" for event in rows.events):
            self._bad(f"/stream: {lost} entries are missing and no ring_loss entry says so")

    # The bench's own count -------------------------------------------------------------------------------

    def _check_count(self, rows: RunRows, fields: Mapping[str, Any]) -> None:
        """received = recorded + rejected, and recorded is what /stream holds up to here."""
        links = fields.get("links")
        if not isinstance(links, list):
            return
        self._accounted = True
        for place, count in enumerate(links):
            received, recorded = count.get("received", -1), count.get("recorded", -1)
            rejected = sum(count.get("rejected", {}).values())
            if received != recorded + rejected:
                self._bad(
                    f"count of link {place}: received {received}, recorded {recorded} + rejected {rejected}"
                )
            held = rows.rows_of(place) if place < len(rows.head.sources) else 0
            if recorded != held:
                self._bad(f"count of link {place}: recorded {recorded} rows, /stream holds {held}")


class _Columns:
    """The stored columns, compared slab by slab with what the entries decode to."""

    def __init__(self, file: H5, head: Head) -> None:
        self._file = file
        self._head = head
        self._done = [0] * len(head.sources)

    def differences(self, rows: Rows) -> Iterator[str]:
        first = self._done[rows.source]
        span = slice(first, first + rows.count)
        self._done[rows.source] += rows.count
        for column, plan in enumerate(self._head.sources[rows.source].channels):
            group = self._file["channels"][plan.name]
            expected: dict[str, npt.NDArray[Any]] = {
                "counts": rows.counts[:, column],
                "value": rows.values[:, column],
            }
            if column == 0:
                expected.update(index=rows.index, time_s=rows.time_s)
            for name, values in expected.items():
                found = group[name][span]
                if found.tobytes() != np.ascontiguousarray(values).tobytes():
                    where = f"/channels/{plan.name}/{name} rows {span.start} to {span.stop - 1}"
                    yield f"{where}: differs from /stream"

    def lengths(self) -> Iterator[str]:
        for place, source in enumerate(self._head.sources):
            for plan in source.channels:
                found = {
                    int(self._file["channels"][plan.name][name].shape[0])
                    for name in ("index", "time_s", "counts", "value")
                }
                if found != {self._done[place]}:
                    yield f"/channels/{plan.name}: {sorted(found)} rows, /stream holds {self._done[place]}"


def _child(path: Path) -> int:
    resource.setrlimit(resource.RLIMIT_AS, (CHILD_MEMORY_BYTES, CHILD_MEMORY_BYTES))
    resource.setrlimit(resource.RLIMIT_CORE, (0, 0))
    report = check_contents(path)
    os.write(1, json.dumps(asdict(report)).encode())
    return 0 if report.ok else 1


if __name__ == "__main__":
    sys.exit(_child(Path(sys.argv[1])))
