"""Live: the SWMR file of a run that is going on, for HDF5 tools that want to look before the bar is broken.

A courtesy: the journal is the record and the feed serves our own views. On the first doubt about the disk
it is given up, never repaired and never re-opened (a killed SWMR file can be read but not appended to).
"""

from __future__ import annotations

import atexit
import os
from collections.abc import Sequence
from pathlib import Path

import h5py
import numpy as np

from daq.record.head import Head
from daq.record.rows import Rows
from daq.record.schema import (
    CHUNK_ROWS,
    FILTERS,
    H5_ERRORS,
    LIBVER,
    TRACE,
    add_channels,
    write_root,
)
from daq.record.texts import H5, fixed_text, json_text, set_text

ROOM_BYTES_MIN = 32 << 20  # less free than this and the live file is the first to go

_given_up: list[LiveFile] = []


class LiveFile:
    """Everything is created first, then SWMR begins and only columns grow."""

    def __init__(self, path: Path, head: Head) -> None:
        self.path = path
        self.trouble = ""
        self._head = head
        self._columns: dict[str, H5] = {}
        self._file: H5 = None
        try:
            self._file = h5py.File(path, "w-", libver=LIBVER, locking="best-effort")
            self._create()
            self._file.swmr_mode = True
        except H5_ERRORS as error:
            self._give_up(f"not created: {error}")

    def _create(self) -> None:
        write_root(self._file, self._head)
        set_text(
            self._file, "live", "This file grows while the run goes on and is replaced by the sealed record."
        )
        add_channels(self._file, self._head, self._make)
        trace = self._file.create_group(TRACE)
        set_text(trace, "NX_class", "NXdata")
        cards = self._file.create_group("cards")
        for name, card in self._head.cards.items():
            cards.create_dataset(name, data=fixed_text(json_text(card)))

    def _make(self, path: str, dtype: str, scratch: str) -> H5:
        made = self._file.create_dataset(
            path, shape=(0,), maxshape=(None,), chunks=(CHUNK_ROWS,), dtype=dtype, **FILTERS
        )
        self._columns[scratch] = made
        return made

    def show(self, taken: Sequence[Rows]) -> None:
        """Append the rows and let readers see them; the file gives itself up when that fails."""
        if self.trouble or not taken:
            return
        if not self._has_room():
            self.close()
            self.trouble = self.trouble or f"less than {ROOM_BYTES_MIN >> 20} MiB free in {self.path.parent}"
            return
        try:
            for rows in taken:
                self._append(rows)
            for column in self._columns.values():
                column.flush()  # File.flush() alone does not show a dataset's new rows
        except H5_ERRORS as error:
            self._give_up(str(error))

    def _append(self, rows: Rows) -> None:
        columns = {f"{rows.source}.index": rows.index, f"{rows.source}.time_s": rows.time_s}
        for place in range(rows.counts.shape[1]):
            columns[f"{rows.source}.{place}.counts"] = rows.counts[:, place]
            columns[f"{rows.source}.{place}.value"] = rows.values[:, place]
        for name, values in columns.items():
            if name not in self._columns:  # a link without channels has no columns
                continue
            column = self._columns[name]
            before = column.shape[0]
            column.resize((before + rows.count,))
            column[before:] = np.ascontiguousarray(values)

    def _has_room(self) -> bool:
        disk = os.statvfs(self.path.parent)
        return disk.f_bavail * disk.f_frsize >= ROOM_BYTES_MIN

    def close(self) -> None:
        """The run is over; nothing more is shown."""
        if self.trouble or self._file is None:
            return
        try:
            self._file.close()
        except H5_ERRORS as error:
            self._give_up(str(error))
        else:
            self._file = None
            self._columns = {}

    def _give_up(self, why: str) -> None:
        """Keep every HDF5 object and leave past HDF5: releasing one may end the process by SIGSEGV."""
        self.trouble = why
        if not _given_up:
            atexit.register(_leave)
        _given_up.append(self)


def _leave() -> None:
    """Runs before h5py's own farewell, which was registered earlier."""
    os._exit(0)
