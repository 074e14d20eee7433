"""Read: a sealed record back into values. A leaf: replay, recomputation, views and the series may import it.

Nothing is parsed before the digest in the first block has been found right, so a damaged, truncated or
foreign file is one clear RecordDamaged and never a crash or a hang inside HDF5. It refuses live files:
those are for HDF5 tools.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from daq.errors import RecordDamaged
from daq.record.digest import address
from daq.record.front import FORMAT, FRONT_BYTES, parse_front
from daq.record.publish import sha256_of
from daq.record.schema import H5_ERRORS
from daq.record.texts import H5, plain_text
from daq.stream.block import Floats
from daq.stream.entry import ENTRY_BYTES_MAX, Entry, EntryDamaged, unpack
from daq.stream.rundata import ChannelData, RunData

_SLAB_BYTES = 4 * ENTRY_BYTES_MAX


def check_bytes(path: Path) -> str:
    """SHA-256 of the HDF5 part if the front promises the same; RecordDamaged if not. Opens no HDF5."""
    promised, promised_bytes, size_bytes = _front(path)
    if size_bytes != promised_bytes:
        word = "truncated" if size_bytes < promised_bytes else "longer than sealed"
        raise RecordDamaged(
            f"{path} is {word}: {size_bytes} bytes, sealed with {promised_bytes}", first_bad="file size"
        )
    found = sha256_of(path, skip_bytes=FRONT_BYTES)
    if found != promised:
        raise RecordDamaged(
            f"{path} was altered after it was sealed (midspan verify names the place)", first_bad="bytes"
        )
    return found


def promised_digest(path: Path) -> str:
    """What the front says of the bytes behind it: enough to see whether a record is one that was read before."""
    return _front(path)[0]


def _front(path: Path) -> tuple[str, int, int]:
    """Promised digest, promised bytes, and how many there are."""
    try:
        with open(path, "rb") as file:
            front = file.read(FRONT_BYTES)
        size_bytes = path.stat().st_size - FRONT_BYTES
    except OSError as error:
        raise RecordDamaged(f"{path} cannot be read ({error.strerror})", first_bad="file") from error
    return *parse_front(front, path), size_bytes


@contextmanager
def open_sealed(path: Path) -> Iterator[H5]:
    """The HDF5 file of a record whose bytes are as sealed."""
    check_bytes(path)
    with open_unchecked(path) as file:
        yield file


@contextmanager
def open_unchecked(path: Path) -> Iterator[H5]:
    """The HDF5 file as it is; only for verify's own child process, which has a time limit."""
    try:
        with h5py.File(path, "r", locking="best-effort") as file:
            if plain_text(file.attrs["format"]) != FORMAT:
                raise RecordDamaged(f"{path} is an HDF5 file of another kind", first_bad="/ format")
            yield file
    except H5_ERRORS as error:
        if isinstance(error, EntryDamaged):
            raise
        raise RecordDamaged(
            f"{path} is not readable as a record ({error})", first_bad="HDF5 structure"
        ) from error


def read_meta(path: Path) -> dict[str, Any]:
    """What a record says of itself, and its result; no columns are read."""
    with open_sealed(path) as file:
        return {**meta_of(file), "path": str(path), "sha256": sha256_of(path)}


def meta_of(file: H5) -> dict[str, Any]:
    texts = {"run_id": "uuid", "series": "series", "specimen": "specimen", "created_utc": "created"}
    return {
        **{name: plain_text(file.attrs[stored]) for name, stored in texts.items()},
        "loading": int(file.attrs["loading"]),
        "midspan_version": plain_text(file.attrs["midspan_version"]),
        "simulated": bool(file.attrs["simulated"]),
        "interrupted": bool(file.attrs["interrupted"]),
        "result": result_of(file),
    }


def gaps_of(file: H5) -> list[dict[str, Any]]:
    """The rows of /gaps."""
    group = file["gaps"]
    columns = {name: group[name][:].tolist() for name in group}
    for name in ("kind", "source"):
        columns[name] = [plain_text(text) for text in columns[name]]
    return [dict(zip(columns, row, strict=True)) for row in zip(*columns.values(), strict=True)]


def read_gaps(path: Path) -> list[dict[str, Any]]:
    """What is missing: kind, source, before_sequence, before_index, missing (-1: unknown), time_s."""
    with open_sealed(path) as file:
        return gaps_of(file)


def read_run(path: Path) -> RunData:
    """The whole run: what the reduction was given when the record was sealed, bit for bit."""
    with open_sealed(path) as file:
        return run_of(file)


def run_of(file: H5) -> RunData:
    groups = sorted(file["channels"].values(), key=lambda group: int(group.attrs["place"]))
    arrays: dict[int, Floats] = {}  # channels of one link share index and time: read once
    channels = {}
    for group in groups:
        name = group.name.rpartition("/")[2]
        index, time_s, counts, value = (
            _array(group[key], arrays) for key in ("index", "time_s", "counts", "value")
        )
        unit = plain_text(group["value"].attrs["units"])
        channels[name] = ChannelData(
            name, plain_text(group.attrs["role"]), unit, index, time_s, counts, value
        )
    events = tuple(json.loads(plain_text(row)) for row in file["events"]["json"][:])
    cards = {name: json.loads(plain_text(card[()])) for name, card in file["cards"].items()}
    return RunData(channels, events, cards)


def _array(dataset: H5, arrays: dict[int, Any]) -> H5:
    place = address(dataset)
    if place not in arrays:
        arrays[place] = dataset[:]
        arrays[place].flags.writeable = False
    return arrays[place]


def read_result(path: Path) -> dict[str, Any]:
    """The result as sealed; {"failure": why} where the reduction failed."""
    with open_sealed(path) as file:
        return result_of(file)


def result_of(file: H5) -> dict[str, Any]:
    group = file["result"]
    if "failure" in group.attrs:
        return {"failure": plain_text(group.attrs["failure"])}
    result = json.loads(plain_text(group["json"][()]))
    assert isinstance(result, dict)
    return result


def read_trace(path: Path) -> Mapping[str, Floats]:
    """The columns of /trace, the drawn quantity first, its axis second."""
    with open_sealed(path) as file:
        group = file["trace"]
        if "signal" not in group.attrs:
            return {}
        first = [plain_text(group.attrs[key]) for key in ("signal", "axes") if key in group.attrs]
        return {name: group[name][:] for name in [*first, *(n for n in group if n not in first)]}


def read_stream(path: Path, *, lead_in: bool = False) -> Iterator[Entry]:
    """The entries from run_opened on; with lead_in also the few before it, where the first row begins."""
    with open_sealed(path) as file:
        opened = int(file["stream"].attrs["opened_sequence"])
        for entry, _ in stream_entries(file["stream"]):
            if lead_in or entry.sequence >= opened:
                yield entry


def stream_entries(dataset: H5) -> Iterator[tuple[Entry, int]]:
    """Every entry of /stream with the byte it begins at; EntryDamaged at the first that is not sound."""
    size, place = dataset.shape[0], 0
    while place < size:
        slab = np.asarray(dataset[place : place + _SLAB_BYTES]).tobytes()
        whole = place + len(slab) == size
        offset = 0
        while offset < len(slab) and (whole or len(slab) - offset >= ENTRY_BYTES_MAX):
            entry, following = unpack(slab, offset)
            yield entry, place + offset
            offset = following
        place += offset
