"""Seal: writes one plain record from a finished run's columns, and never more than one slab of it in memory.

It refuses to touch an existing file, and leaves nothing behind that is not whole: the caller gives the
file its name only after this has returned.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import numpy.typing as npt

from daq.errors import RecordingError
from daq.record.columns import STREAM, Columns
from daq.record.digest import OWN_DIGEST, BlockDigest, address, describe_object, seal_digest, walk
from daq.record.front import FRONT_BYTES, front_block
from daq.record.publish import sha256_of
from daq.record.rows import Gap
from daq.record.schema import CHUNK_BYTES, CHUNK_ROWS, FILTERS, LIBVER, TRACE, add_channels, write_root
from daq.record.sink import Sink
from daq.record.texts import H5, fixed_text, json_text, set_plain_all, set_text, utf8

Column = npt.NDArray[Any]
DRAWN = ("stress_mpa", "force_net_n", "force_n")  # of the reduction's trace: what a viewer shows
OVER = ("strain", "deflection_mm", "position_mm", "time_s")  # and over what, the first that is there


@dataclass(frozen=True, slots=True)
class Outcome:
    """What the reduction said. trace: columns of /trace by name; failure: why there is no result."""

    result: Mapping[str, Any] = field(default_factory=dict)
    trace: Mapping[str, Column] = field(default_factory=dict)
    failure: str = ""


@dataclass(frozen=True, slots=True)
class Before:
    """What the seal ties this record to: the series' previous record and the journal it was cut from."""

    previous_record: str = ""
    previous_sha256: str = ""
    journal_chain: str = ""


def write_record(
    temp: Path, columns: Columns, outcome: Outcome, before: Before, *, pulse: Callable[[], object] = bool
) -> None:
    """A sealed, durable record at `temp`; OSError and no file where the disk does not take it.

    pulse: called between pieces, so that who waits for a sign of life gets one.
    """
    sink = Sink(temp)
    try:
        with h5py.File(
            temp,
            "w",
            driver="fileobj",
            fileobj=sink,
            libver=LIBVER,
            userblock_size=FRONT_BYTES,
            rdcc_nbytes=4 << 20,
        ) as file:
            _Sealer(file, sink, columns, pulse).write(outcome, before)
        if sink.failed is None:
            size_bytes = temp.stat().st_size - FRONT_BYTES
            front = front_block(sha256_of(temp, skip_bytes=FRONT_BYTES), size_bytes)
        else:
            front = b""
        sink.settle(front)
    except OSError:
        temp.unlink(missing_ok=True)
        raise
    finally:
        sink.release()


class _DiskRefused(Exception):
    """Ends the writing early; the sink holds the error."""


class _Sealer:
    def __init__(self, file: H5, sink: Sink, columns: Columns, pulse: Callable[[], object]) -> None:
        self._pulse = pulse
        self._file = file
        self._sink = sink
        self._columns = columns
        self._digests: dict[str, dict[str, Any]] = {}

    def write(self, outcome: Outcome, before: Before) -> None:
        try:
            write_root(self._file, self._columns.head)
            self._file.attrs["interrupted"] = np.uint8(self._columns.rows.interrupted)
            add_channels(self._file, self._columns.head, self._scratch_column)
            self._write_trace(outcome.trace)
            self._write_events(self._columns.rows.events)
            self._write_gaps(self._columns.rows.gaps)
            self._write_cards()
            self._write_result(outcome)
            self._write_stream()
            self._write_seal(before)
        except _DiskRefused:
            return  # HDF5 may close in peace; Sink.settle raises the error

    # Pieces ----------------------------------------------------------------------------------------------

    def _scratch_column(self, path: str, dtype: str, scratch: str) -> H5:
        columns = self._columns
        return self._column(path, dtype, columns.scratch_bytes(scratch) // 8, columns.slabs(scratch, dtype))

    def _column(
        self, path: str, dtype: npt.DTypeLike, rows: int, slabs: Iterable[Column], shuffle: bool = True
    ) -> H5:
        made = self._create(path, dtype, rows, shuffle=shuffle)
        digest = BlockDigest()
        done = 0
        for slab in slabs:
            made[done : done + len(slab)] = slab
            digest.feed(slab.tobytes())
            done += len(slab)
            self._pulse()
            if self._sink.failed is not None:
                raise _DiskRefused
        if done != rows:
            raise RecordingError(f"{path}: {done} rows in the scratch where {rows} were expected")
        self._digests[path] = digest.finish()
        return made

    def _create(self, path: str, dtype: npt.DTypeLike, rows: int, shuffle: bool = True) -> H5:
        if not rows:
            return self._file.create_dataset(path, shape=(0,), dtype=dtype)
        itemsize = np.dtype(dtype).itemsize
        chunk = min(rows, CHUNK_ROWS if itemsize <= 8 else max(1, CHUNK_BYTES // itemsize))
        return self._file.create_dataset(
            path, shape=(rows,), chunks=(chunk,), dtype=dtype, **{**FILTERS, "shuffle": shuffle}
        )

    def _array(self, path: str, values: Column) -> H5:
        whole = np.ascontiguousarray(values)
        return self._column(path, whole.dtype, len(whole), _cut(whole))

    def _texts(self, path: str, texts: Sequence[str]) -> H5:
        raw = [utf8(text) for text in texts]
        dtype = h5py.string_dtype("utf-8", max([1, *map(len, raw)]))
        step = max(1, CHUNK_BYTES // dtype.itemsize)
        slabs = (np.array(raw[at : at + step], dtype=dtype) for at in range(0, len(raw), step))
        return self._column(path, dtype, len(raw), slabs)

    def _text(self, path: str, text: str) -> H5:
        value = fixed_text(text)
        digest = BlockDigest()
        digest.feed(value.tobytes())
        self._digests[path] = digest.finish()
        return self._file.create_dataset(path, data=value)

    # Groups ----------------------------------------------------------------------------------------------

    def _write_trace(self, trace: Mapping[str, Column]) -> None:
        group = self._file.create_group(TRACE)
        set_text(group, "NX_class", "NXdata")
        if not trace:
            self._link_trace(group)
            return
        names = list(trace)
        signal = next((name for name in DRAWN if name in trace), names[0])
        axis = next((name for name in OVER if name in trace and name != signal), "")
        _name_axes(group, signal, axis)
        for name in names:
            made = self._array(f"/{TRACE}/{name}", np.asarray(trace[name], dtype="<f8"))
            set_text(made, "units", _unit_of(name))

    def _link_trace(self, group: H5) -> None:
        """No stress was computed: force over the position of the same link, or over time, as recorded."""
        plans = [(source.link, plan) for source in self._columns.head.sources for plan in source.channels]
        force = next(((link, plan) for link, plan in plans if plan.role == "force"), None)
        if force is None:
            set_text(group, "about", "no force channel and no reduction: nothing to draw")
            return
        channels = self._file["channels"]
        position = next((p for link, p in plans if p.role == "position" and link == force[0]), None)
        axis = "position_mm" if position else "time_s"
        over = channels[position.name]["value"] if position else channels[force[1].name]["time_s"]
        group["force_n"], group[axis] = channels[force[1].name]["value"], over
        _name_axes(group, "force_n", axis)

    def _write_events(self, events: Sequence[Mapping[str, Any]]) -> None:
        self._file.create_group("events")
        self._array("/events/sequence", np.array([event["sequence"] for event in events], dtype="<u8"))
        times = [event.get("time_s") for event in events]
        made = self._array(
            "/events/time_s", np.array([np.nan if t is None else t for t in times], dtype="<f8")
        )
        set_text(made, "units", "s")
        self._texts("/events/event", [str(event.get("event", "")) for event in events])
        self._texts("/events/severity", [str(event.get("severity", "")) for event in events])
        self._texts("/events/json", [json_text(event) for event in events])

    def _write_gaps(self, gaps: Sequence[Gap]) -> None:
        sources = self._columns.head.sources
        group = self._file.create_group("gaps")
        set_text(
            group,
            "about",
            "kind samples: numbers the device gave; kind entries: numbered at the bench. -1: not known",
        )
        self._texts("/gaps/kind", [gap.kind.value for gap in gaps])
        self._texts("/gaps/source", [sources[gap.source].link if gap.source >= 0 else "" for gap in gaps])
        self._array("/gaps/before_sequence", np.array([gap.before_sequence for gap in gaps], dtype="<u8"))
        self._array("/gaps/before_index", np.array([gap.before_index for gap in gaps], dtype="<i8"))
        self._array("/gaps/missing", np.array([gap.missing for gap in gaps], dtype="<i8"))
        self._array("/gaps/time_s", np.array([gap.time_s for gap in gaps], dtype="<f8"))

    def _write_cards(self) -> None:
        self._file.create_group("cards")
        for name, card in self._columns.head.cards.items():
            self._text(f"/cards/{name}", json_text(card))

    def _write_result(self, outcome: Outcome) -> None:
        group = self._file.create_group("result")
        set_text(group, "status", "failed" if outcome.failure else "reduced")
        if outcome.failure:
            set_text(group, "failure", outcome.failure)
        set_plain_all(
            group, {key: value for key, value in outcome.result.items() if key not in ("status", "failure")}
        )
        self._text("/result/json", json_text(outcome.result))

    def _write_stream(self) -> None:
        columns, span = self._columns, self._columns.span
        slabs = columns.slabs(STREAM, "u1")
        made = self._column("/stream", "u1", columns.scratch_bytes(STREAM), slabs, shuffle=False)
        set_text(
            made,
            "about",
            "the entries' bytes, one after the other: layout in the text of midspan's entry module",
        )
        made.attrs["stream_id"] = np.uint64(columns.head.stream_id)
        made.attrs["first_sequence"] = np.uint64(span.first_sequence)
        made.attrs["opened_sequence"] = np.uint64(columns.head.sequence)
        made.attrs["last_sequence"] = np.uint64(span.last_sequence)
        made.attrs["entries"] = np.uint64(span.entries)
        made.attrs["lead_in_entries"] = np.uint64(span.lead_in)
        made.attrs["opened_monotonic_ns"] = np.uint64(columns.head.opened_ns)
        made.attrs["closed"] = np.uint8(
            columns.rows.closing is not None
        )  # 0: the journal ended before the run did

    def _write_seal(self, before: Before) -> None:
        group = self._file.create_group("seal")
        written = {address(self._file[path]): digest for path, digest in self._digests.items()}
        objects = {
            path: {**describe_object(item), **written.get(address(item), {})}
            for path, item in walk(self._file)
        }
        listed = json_text(objects)
        words = {
            "algorithm": "sha256",
            "previous_record": before.previous_record,
            "previous_sha256": before.previous_sha256,
            "journal_chain": before.journal_chain,
        }
        for name, text in words.items():
            set_text(group, name, text)
        set_text(group, OWN_DIGEST, seal_digest(words, listed))
        self._text("/seal/list", listed)


def _cut(whole: Column) -> Iterator[Column]:
    step = max(1, CHUNK_BYTES * 8 // max(1, whole.itemsize))
    for first in range(0, len(whole), step):
        yield whole[first : first + step]


def _name_axes(group: H5, signal: str, axis: str) -> None:
    set_text(group, "signal", signal)
    if axis:
        set_text(group, "axes", axis)


def _unit_of(name: str) -> str:
    suffix = name.rpartition("_")[2]
    return {"mpa": "MPa", "n": "N", "mm": "mm", "um": "um", "s": "s", "gpa": "GPa"}.get(suffix, "1")
