"""Schema: the layout of a plain record, shared by the live file and the sealed one. Decides nothing about
a run.

/            format, format_version, uuid, created, midspan_version, simulated, default="trace", which bar
/channels/C  index, time_s, counts, value; units and calibration on `value`; the channels of one link share
             index and time_s
/trace       NXdata: stress over strain or deflection, or force over position where the reduction gave none
/events      sequence, time_s, event, severity, json: one row an event, JSON text of fixed width
/gaps        kind, source, before_sequence, before_index, missing (-1: number not known), time_s
/cards       frame, method, specimen, run: JSON text, exactly as resolved when the run was opened
/result      json, and its plain numbers as attributes
/stream      the entries' bytes
/seal        list: JSON text, digest of every object; previous record of the series; journal chain head

Times are seconds since the run was opened, forces are gross. No compound types, no variable-length
strings, so that the oldest reader can open it. The first 512 bytes of a sealed file are text and hold the
digest of the rest: a damaged or foreign file is told apart before HDF5 ever parses it.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from importlib.metadata import PackageNotFoundError, version
from typing import Any, TypeAlias

import numpy as np

from daq.record.front import FORMAT, FORMAT_VERSION
from daq.record.head import ChannelPlan, Head
from daq.record.texts import H5, set_plain, set_text

CHUNK_ROWS = 16_384
CHUNK_BYTES = CHUNK_ROWS * 8
LIBVER = ("v110", "v110")  # the oldest format that SWMR allows
# everything h5py raises for a bad file or disk
H5_ERRORS = (OSError, RuntimeError, ValueError, KeyError, TypeError)
COLUMN_DTYPES = {"index": "<i8", "time_s": "<f8", "counts": "<f8", "value": "<f8"}
SHARED_COLUMNS = ("index", "time_s")
TRACE = "trace"

MakeColumn: TypeAlias = Callable[[str, str, str], H5]


def midspan_version() -> str:
    try:
        return version("midspan")
    except PackageNotFoundError:
        return "not installed"


FILTERS: Mapping[str, Any] = {
    "compression": "gzip",
    "compression_opts": 1,
    "shuffle": True,
    "fletcher32": True,
}


def write_root(file: H5, head: Head) -> None:
    set_text(file, "format", FORMAT)
    file.attrs["format_version"] = np.int64(FORMAT_VERSION)
    set_text(file, "NX_class", "NXroot")
    set_text(file, "default", TRACE)
    set_text(file, "uuid", head.run_id)
    set_text(file, "created", head.created_utc)
    set_text(file, "midspan_version", midspan_version())
    file.attrs["simulated"] = np.uint8(head.simulated)
    set_text(file, "series", head.series)
    set_text(file, "specimen", head.specimen)
    file.attrs["loading"] = np.int64(head.loading)
    file.attrs["opened_s"] = head.opened_s
    set_text(file, "about", "Times are seconds since the run was opened. Forces are gross, never tared.")
    if head.simulated:
        set_text(file, "warning", "SIMULATED: these numbers come from a virtual frame, not from a specimen.")


def add_channels(file: H5, head: Head, make: MakeColumn) -> None:
    """All channel groups with their columns; make(path, dtype, scratch name) makes one column."""
    channels = file.create_group("channels")
    set_text(channels, "about", "channels of one link share their index and time_s")
    for place, source in enumerate(head.sources):
        shared: dict[str, H5] = {}
        for column, plan in enumerate(source.channels):
            group = channels.create_group(plan.name)
            _describe(group, plan, source.link)
            group.attrs["place"] = np.int64(len(channels) - 1)  # in the order of the frame card
            for name, dtype in COLUMN_DTYPES.items():
                if name in shared:
                    group[name] = shared[name]
                    continue
                scratch = f"{place}.{name}" if name in SHARED_COLUMNS else f"{place}.{column}.{name}"
                made = make(f"/channels/{plan.name}/{name}", dtype, scratch)
                _describe_column(made, name, plan)
                if name in SHARED_COLUMNS:
                    shared[name] = made


def _describe(group: H5, plan: ChannelPlan, link: str) -> None:
    set_text(group, "NX_class", "NXdata")
    set_text(group, "signal", "value")
    set_text(group, "axes", "time_s")
    set_text(group, "link", link)
    set_text(group, "role", plan.role)


def _describe_column(made: H5, name: str, plan: ChannelPlan) -> None:
    if name == "index":
        set_text(made, "long_name", "number the device or the decoder gave to the sample")
    elif name == "time_s":
        set_text(made, "units", "s")
    elif name == "counts":
        set_text(made, "units", "count")
        set_text(made, "long_name", f"{plan.name}, as the device gave it")
    else:
        set_text(made, "units", plan.unit)
        set_text(made, "long_name", f"{plan.name} ({plan.unit})" if plan.unit else plan.name)
        set_text(made, "calibration", "value = sign * (counts * scale + offset)")
        for key in ("scale", "offset", "sign"):
            made.attrs[key] = np.float64(getattr(plan, key))
        for key in ("calibrated_on", "counts_min", "counts_max"):
            set_plain(made, key, plan.card.get(key))
