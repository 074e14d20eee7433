"""Digest: SHA-256 of every object of a record, in blocks, so that damage can be named. Reads open HDF5;
writes nothing.

A digest covers what a reader gets - names, types, shapes, attributes, values - not how HDF5 stores it; the
text block at the beginning of the file covers the stored bytes as well.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterator, Mapping
from typing import Any
from zlib import crc32

import h5py
import numpy as np

from daq.record.schema import H5_ERRORS
from daq.record.texts import H5

BLOCK_BYTES = 1 << 19
SEAL = "/seal"
OWN_DIGEST = "sha256"  # attribute of /seal: over its other attributes and its list
DEPTH_MAX = 4
OBJECTS_MAX = 10_000


class BlockDigest:
    """SHA-256 of a dataset's bytes and a CRC-32 per BLOCK_BYTES, which only locates; fed in pieces of any size."""

    def __init__(self) -> None:
        self._whole = hashlib.sha256()
        self._block = 0
        self._filled = 0
        self.blocks: list[str] = []

    def feed(self, data: bytes | memoryview) -> None:
        view = memoryview(data).cast("B")
        self._whole.update(view)
        while view:
            part = view[: BLOCK_BYTES - self._filled]
            self._block = crc32(part, self._block)
            self._filled += len(part)
            view = view[len(part) :]
            if self._filled == BLOCK_BYTES:
                self._end_block()

    def finish(self) -> dict[str, Any]:
        if self._filled:
            self._end_block()
        return {"sha256": self._whole.hexdigest(), "blocks": self.blocks}

    def _end_block(self) -> None:
        self.blocks.append(f"{self._block:08x}")
        self._block = 0
        self._filled = 0


def describe_object(item: H5) -> dict[str, Any]:
    """Kind, type, shape and attributes of a group or dataset; everything but its values."""
    described: dict[str, Any] = {"attributes": _attributes(item)}
    if isinstance(item, h5py.Dataset):
        described.update(dtype=item.dtype.str, shape=list(item.shape))
    return described


def _attributes(item: H5) -> str:
    listed = []
    for name in sorted(item.attrs):
        value = np.asarray(item.attrs[name])
        listed.append([name, value.dtype.str, list(value.shape), value.tobytes().hex()])
    return hashlib.sha256(json.dumps(listed).encode()).hexdigest()


def seal_digest(words: Mapping[str, str], listed: str) -> str:
    """Digest of the seal itself, which its list cannot hold."""
    return hashlib.sha256(json.dumps([sorted(words.items()), listed]).encode()).hexdigest()


def address(item: H5) -> int:
    """Where an object stands in its file: the same for all its names."""
    return int(h5py.h5o.get_info(item.id).addr)


def walk(file: H5) -> Iterator[tuple[str, H5]]:
    """Every object with its path, in order, the seal left out; only plain links are followed."""
    yield "/", file["/"]
    yield from _walk(file["/"], "", 1)


def _walk(group: H5, path: str, depth: int) -> Iterator[tuple[str, H5]]:
    if depth > DEPTH_MAX or len(group) > OBJECTS_MAX:
        raise ValueError(f"{path or '/'} is nested deeper or wider than any record")
    for name in sorted(group):
        place = f"{path}/{name}"
        if place == SEAL:
            continue
        if not isinstance(group.get(name, getlink=True), h5py.HardLink):
            raise ValueError(f"{place} is a link to elsewhere")
        item = group[name]
        yield place, item
        if isinstance(item, h5py.Group):
            yield from _walk(item, place, depth + 1)


def slabs_of(dataset: H5) -> Iterator[tuple[int, bytes]]:
    """A dataset's bytes in blocks of about BLOCK_BYTES, each with its first row."""
    if not dataset.shape:
        yield 0, np.asarray(dataset[()]).tobytes()
        return
    rows = max(1, BLOCK_BYTES // max(1, dataset.dtype.itemsize))
    for first in range(0, dataset.shape[0], rows):
        yield first, dataset[first : first + rows].tobytes()


def first_difference(dataset: H5, promised: dict[str, Any]) -> str | None:
    """None where the values are the promised ones; otherwise which rows are damaged."""
    digest = BlockDigest()
    good = 0
    try:
        for first, data in slabs_of(dataset):
            good = first
            digest.feed(data)
    except H5_ERRORS as error:
        return f"rows from about {good}: not readable ({error})"
    found = digest.finish()
    if found["sha256"] == promised.get("sha256"):
        return None
    blocks = promised.get("blocks", [])
    places = [
        place for place, pair in enumerate(zip(found["blocks"], blocks, strict=False)) if pair[0] != pair[1]
    ]
    return _rows_named(dataset, places[0] if places else min(len(blocks), len(found["blocks"])))


def _rows_named(dataset: H5, block: int) -> str:
    rows = BLOCK_BYTES // max(1, dataset.dtype.itemsize)
    last = min((block + 1) * rows, dataset.shape[0] if dataset.shape else 1)
    return f"rows {block * rows} to {last - 1}"
