"""Source: a sealed record as the values that recomputation needs. Reads; parses nothing before its bytes are proven.

One pass over the entries sorts them: what a link brought (reads), what the bench said or sent, and the blocks that were
recorded. Nothing is decoded here.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, NamedTuple, TypeAlias

import numpy as np

from daq.errors import RecordDamaged
from daq.record.head import Head, head_of
from daq.record.read import check_bytes, meta_of, open_unchecked, run_of
from daq.record.rows import OPENED
from daq.record.texts import plain_text
from daq.stream.entry import EntryDamaged, Kind, headers
from daq.stream.payloads import unpack_event
from daq.stream.rundata import RunData

RAW_HEAD_BYTES = 4
MEMORY = "bench_memory"


class Read(NamedTuple):
    """Bytes that came over one link at one moment."""

    monotonic_ns: int
    link: int
    data: bytes


class Said(NamedTuple):
    """An event, or bytes sent: what the bench did. event: None for bytes sent."""

    monotonic_ns: int
    sequence: int
    payload: bytes
    event: Mapping[str, Any] | None


Item: TypeAlias = Read | Said


@dataclass(slots=True, eq=False)
class Source:
    """items: what came and what was said, in the order of the stream. opened_at: place of run_opened in it. blocks: the
    payloads of the recorded blocks; lead_in: how many of them stand before the opening. holes: missing numbers."""

    path: Path
    sha256: str
    meta: Mapping[str, Any]
    stored: RunData
    head: Head
    items: list[Item]
    opened_at: int
    blocks: list[bytes]
    lead_in: int
    entries: int
    holes: int

    @property
    def memory(self) -> Mapping[str, Any] | None:
        """What the bench wrote down of itself directly before the opening; None in records of before."""
        before = self.items[self.opened_at - 1] if self.opened_at else None
        if isinstance(before, Said) and before.event is not None and before.event.get("event") == MEMORY:
            return before.event
        return None


def read_source(path: Path) -> Source:
    """RecordDamaged with one line for everything that is no whole record."""
    sha256 = check_bytes(path)
    with open_unchecked(path) as file:
        meta, stored = meta_of(file), run_of(file)
        dataset = file["stream"]
        data = np.asarray(dataset[:]).tobytes()
        opened, opened_ns = int(dataset.attrs["opened_sequence"]), int(dataset.attrs["opened_monotonic_ns"])
        stream_id = int(dataset.attrs["stream_id"])
        meta = {**meta, "format_version": int(file.attrs["format_version"]), "link_names": _links(file)}
    try:
        sorted_ = _sort(data, opened)
    except EntryDamaged as error:
        raise RecordDamaged(f"{path}: {error.why}", first_bad="/stream") from error
    items, opened_at, *_ = sorted_
    said = items[opened_at] if opened_at >= 0 else None
    if not isinstance(said, Said) or said.event is None or said.event.get("event") != OPENED:
        raise RecordDamaged(f"{path} holds no {OPENED}", first_bad="/stream")
    head = head_of(said.event, stream_id=stream_id, sequence=opened, monotonic_ns=opened_ns)
    return Source(path, sha256, meta, stored, head, *sorted_)


def _links(file: Any) -> tuple[str, ...]:
    return tuple(dict.fromkeys(plain_text(group.attrs["link"]) for group in file["channels"].values()))


def _sort(data: bytes, opened: int) -> tuple[list[Item], int, list[bytes], int, int, int]:
    """items, opened_at, blocks, lead_in, entries, holes."""
    items: list[Item] = []
    blocks: list[bytes] = []
    opened_at, lead_in, entries, holes = -1, 0, 0, 0
    expected: int | None = None
    raw, block = int(Kind.RAW), int(Kind.BLOCK)
    for kind, sequence, monotonic_ns, start, stop in headers(data):
        entries += 1
        if sequence != expected and expected is not None:
            holes += sequence - expected
        expected = sequence + 1
        if kind == block:
            blocks.append(data[start:stop])
        elif kind == raw and not data[start + 2]:
            link = data[start] | data[start + 1] << 8
            items.append(Read(monotonic_ns, link, data[start + RAW_HEAD_BYTES : stop]))
        elif kind == raw:
            items.append(Said(monotonic_ns, sequence, data[start:stop], None))
        else:
            if sequence == opened:
                opened_at, lead_in = len(items), len(blocks)
            items.append(Said(monotonic_ns, sequence, data[start:stop], unpack_event(data[start:stop])))
    return items, opened_at, blocks, lead_in, entries, holes
