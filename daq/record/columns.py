"""Columns: one run's decoded columns and its entries' bytes in plain scratch files while it runs.

Keeps memory flat however long the run is, and leaves nothing to decode at the close. Scratch has no value
after its process: it is never read by another one, never synced, and rebuilt from the journal when in
doubt.
"""

from __future__ import annotations

import mmap
import shutil
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Any

import numpy as np
import numpy.typing as npt

from daq.record.head import Head
from daq.record.rows import Rows, RunRows
from daq.stream.entry import Entry
from daq.stream.rundata import ChannelData, RunData

SLAB_BYTES = 1 << 20
STREAM = "stream"


@dataclass(frozen=True, slots=True)
class StreamSpan:
    """Which entries the scratch holds. lead_in: those before run_opened, for the decoders' half rows."""

    first_sequence: int
    last_sequence: int
    entries: int
    lead_in: int


class Columns:
    """Add the entries of a run from its run_opened on; settle now and then; read all of it at the close."""

    def __init__(self, folder: Path, head: Head, lead_in: Sequence[tuple[Entry, bytes]] = ()) -> None:
        shutil.rmtree(folder, ignore_errors=True)
        folder.mkdir(parents=True)
        self.head = head
        self.rows = RunRows(head)
        self._folder = folder
        self._files: dict[str, IO[bytes]] = {STREAM: open(folder / STREAM, "wb")}  # noqa: SIM115 (closed in remove)
        for place, source in enumerate(head.sources):
            for name in _names(place, len(source.channels)):
                self._files[name] = open(folder / name, "wb")  # noqa: SIM115
        self._files[STREAM].write(b"".join(data for _, data in lead_in))
        self._lead_in = len(lead_in)
        self._first_sequence = lead_in[0][0].sequence if lead_in else head.sequence
        self._last_sequence = head.sequence
        self._entries = len(lead_in)

    @property
    def span(self) -> StreamSpan:
        return StreamSpan(self._first_sequence, self._last_sequence, self._entries, self._lead_in)

    def add(self, entry: Entry, packed: bytes | memoryview) -> None:
        """packed: the entry's own bytes, as they stand in the journal."""
        self.rows.feed(entry)
        self._files[STREAM].write(packed)
        self._last_sequence = entry.sequence
        self._entries += 1

    def settle(self) -> tuple[Rows, ...]:
        """Write what has come together; returns it for whoever shows the run while it lasts."""
        taken = self.rows.take()
        for rows in taken:
            self._files[f"{rows.source}.index"].write(rows.index.tobytes())
            self._files[f"{rows.source}.time_s"].write(rows.time_s.tobytes())
            for column in range(rows.counts.shape[1]):
                self._files[f"{rows.source}.{column}.counts"].write(rows.counts[:, column].tobytes())
                self._files[f"{rows.source}.{column}.value"].write(rows.values[:, column].tobytes())
        return taken

    def finish(self) -> None:
        """All entries are in: everything on file, ready to be read."""
        self.settle()
        for file in self._files.values():
            file.flush()

    def size_bytes(self) -> int:
        """What a record of it takes at most, but for a megabyte of texts and tables."""
        return sum(self.scratch_bytes(name) for name in self._files)

    def scratch_bytes(self, name: str) -> int:
        return (self._folder / name).stat().st_size

    def slabs(self, name: str, dtype: str) -> Iterator[npt.NDArray[Any]]:
        """That column in order, at most SLAB_BYTES at a time; read, not mapped, so that memory stays flat."""
        with open(self._folder / name, "rb") as file:
            while slab := file.read(SLAB_BYTES):
                yield np.frombuffer(slab, dtype=dtype)

    def run_data(self) -> RunData:
        """The run as the reduction sees it; the arrays are the scratch files, mapped read-only."""
        channels = {}
        for place, source in enumerate(self.head.sources):
            index = self._mapped(f"{place}.index", "<i8")
            time_s = self._mapped(f"{place}.time_s", "<f8")
            for column, plan in enumerate(source.channels):
                counts = self._mapped(f"{place}.{column}.counts", "<f8")
                value = self._mapped(f"{place}.{column}.value", "<f8")
                channels[plan.name] = ChannelData(
                    plan.name, plan.role, plan.unit, index, time_s, counts, value
                )
        return RunData(channels, tuple(self.rows.events), self.head.cards)

    def _mapped(self, name: str, dtype: str) -> npt.NDArray[Any]:
        path = self._folder / name
        if not path.stat().st_size:
            return np.empty(0, dtype=dtype)
        with open(path, "rb") as file:
            return np.frombuffer(mmap.mmap(file.fileno(), 0, access=mmap.ACCESS_READ), dtype=dtype)

    def remove(self) -> None:
        """Let the scratch go. A mapping still held by someone stays readable until it is dropped."""
        for file in self._files.values():
            try:
                file.close()
            except OSError:
                continue  # a full disk refuses the last buffer; the scratch is thrown away anyway
        shutil.rmtree(self._folder, ignore_errors=True)


def _names(place: int, columns: int) -> Iterator[str]:
    yield f"{place}.index"
    yield f"{place}.time_s"
    for column in range(columns):
        yield f"{place}.{column}.counts"
        yield f"{place}.{column}.value"
