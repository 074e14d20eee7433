"""Live: the SWMR file of a run that is going on, for HDF5 tools that want to look before the bar is broken.

A courtesy: the journal is the record and the feed serves our own views. On the first doubt about the disk
it is given up, never repaired and never re-opened (a killed SWMR file can be read but not appended to).
"""

from __future__ import annotations

import atexit
import io
import os
import sys
from collections.abc import Sequence
from contextlib import suppress
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
        self._columns: dict[str, H5] = {}
        self._file: H5 = None
        try:
            image, names = _empty_file(head)
            path.write_bytes(image)
            self._file = h5py.File(path, "r+", libver=LIBVER, locking="best-effort")
            self._columns = {scratch: self._file[name] for scratch, name in names.items()}
            self._file.swmr_mode = True
        except H5_ERRORS as error:
            self._give_up(f"not created: {error}")

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
        self.trouble = why.split("\n", 1)[0]
        with suppress(OSError):
            os.truncate(self.path, 0)  # it stays open to the end: at least the disk gets its room back
        if not _given_up:
            atexit.register(_leave)
        _given_up.append(self)


def _empty_file(head: Head) -> tuple[bytes, dict[str, str]]:
    """The file before its first row, and the path of each column by its scratch name.

    Built in memory: a disk that refuses during the building would end the process, as in sink.py.
    """
    names: dict[str, str] = {}
    memory = io.BytesIO()

    with h5py.File(memory, "w", libver=LIBVER) as file:

        def make(path: str, dtype: str, scratch: str) -> H5:
            names[scratch] = path
            return file.create_dataset(
                path, shape=(0,), maxshape=(None,), chunks=(CHUNK_ROWS,), dtype=dtype, **FILTERS
            )

        write_root(file, head)
        set_text(file, "live", "This file grows while the run goes on and is replaced by the sealed record.")
        add_channels(file, head, make)
        set_text(file.create_group(TRACE), "NX_class", "NXdata")
        file.create_group("cards")
        for name, card in head.cards.items():
            file["cards"].create_dataset(name, data=fixed_text(json_text(card)))
    return memory.getvalue(), names


def _leave() -> None:
    """Runs before h5py's own farewell, which was registered earlier."""
    sys.stdout.flush()
    sys.stderr.flush()
    os._exit(1 if hasattr(sys, "last_value") else 0)
