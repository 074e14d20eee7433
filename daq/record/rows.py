"""Rows: what the entries of one run decode to - columns, events, gaps. Pure; the one place where a run is
decoded.

Archivist, recovery, verify and the tests all go through RunRows, so the arrays of a record are by
construction what its own entries say. Nothing is interpolated, dropped or put in order here.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import Enum
from typing import Any

import numpy as np
import numpy.typing as npt

from daq.record.head import Head
from daq.stream.block import GAP_UNKNOWN, Block, Floats
from daq.stream.entry import Entry, Kind
from daq.stream.payloads import unpack_block, unpack_event

OPENED = "run_opened"
CLOSED = "run_closed"
COUNTED = "accounting"  # {links: [{received, recorded, rejected: {reason: rows}}, ...]} since the opening
CARD_KEYS = ("frame", "method", "specimen_card")  # of run_opened; in RunData they stand under `cards`
# Fields of events that are instants on the bench's clock, not durations: shifted like all times of a record.
INSTANT_KEYS = ("time_s", "onset_s", "last_good_s", "first_dropped_s")


class GapKind(Enum):
    SAMPLES = "samples"  # numbers the device gave to samples that never arrived
    ENTRIES = "entries"  # entries numbered at the bench that never reached the journal


@dataclass(frozen=True, slots=True)
class Gap:
    """Directly before that sequence and index. missing: how many, GAP_UNKNOWN where nobody can know."""

    kind: GapKind
    source: int
    before_sequence: int
    before_index: int
    missing: int
    time_s: float


@dataclass(frozen=True, slots=True, eq=False)
class Rows:
    """Consecutive rows of one source: index, time since the run was opened, counts and values (n, k)."""

    source: int
    index: npt.NDArray[np.int64]
    time_s: Floats
    counts: Floats
    values: Floats

    @property
    def count(self) -> int:
        return len(self.time_s)


@dataclass(slots=True)
class _Source:
    blocks: list[Block] = field(default_factory=list)
    next_index: int | None = None
    rows: int = 0


class RunRows:
    """Feed the entries from run_opened to run_closed in order; take the rows that have come together."""

    def __init__(self, head: Head) -> None:
        self.head = head
        self.events: list[dict[str, Any]] = []
        self.gaps: list[Gap] = []
        self.blocks_misfit = 0  # blocks whose shape is not the card's: kept as entries, not in the columns
        self.closing: dict[str, Any] | None = None  # the run_closed event, once it has come
        self._sources = [_Source() for _ in head.sources]
        self._next_sequence = head.sequence

    def feed(self, entry: Entry) -> None:
        if entry.sequence != self._next_sequence:
            missing = entry.sequence - self._next_sequence
            time_s = (entry.monotonic_ns - self.head.opened_ns) * 1e-9
            self.gaps.append(Gap(GapKind.ENTRIES, -1, entry.sequence, -1, missing, time_s))
        self._next_sequence = entry.sequence + 1
        if entry.kind is Kind.BLOCK:
            self.feed_block(unpack_block(entry.payload), entry.sequence)
        elif entry.kind is Kind.EVENT:
            self.events.append(run_event(unpack_event(entry.payload), entry.sequence, self.head.opened_s))
            if self.events[-1].get("event") == CLOSED:
                self.closing = self.events[-1]

    def feed_block(self, block: Block, sequence: int) -> None:
        """A block by itself, as `feed` takes it out of its entry."""
        if not self._fits(block):
            self.blocks_misfit += 1
            return
        source = self._sources[block.source]
        missing = block.gap_samples
        if source.next_index is not None and block.first_index > source.next_index and missing != GAP_UNKNOWN:
            missing = max(missing, block.first_index - source.next_index)
        if missing and block.count:
            time_s = float(block.time_s[0]) - self.head.opened_s
            self.gaps.append(Gap(GapKind.SAMPLES, block.source, sequence, block.first_index, missing, time_s))
        source.next_index = block.first_index + block.count
        source.rows += block.count
        source.blocks.append(block)

    def _fits(self, block: Block) -> bool:
        sources = self.head.sources
        return block.source < len(sources) and block.counts.shape[1] == len(sources[block.source].channels)

    def rows_of(self, source: int) -> int:
        """How many rows of that source have been fed so far."""
        return self._sources[source].rows

    @property
    def interrupted(self) -> bool:
        """Whether the run ended otherwise than the bench meant it to."""
        return self.closing is None or self.closing.get("interrupted") is not False

    def take(self) -> tuple[Rows, ...]:
        """The rows fed since the last take, per source."""
        taken = []
        for place, source in enumerate(self._sources):
            if source.blocks:
                taken.append(self._join(place, source.blocks))
                source.blocks = []
        return tuple(taken)

    def _join(self, place: int, blocks: list[Block]) -> Rows:
        counts = np.concatenate([block.counts for block in blocks])
        time_s = np.concatenate([block.time_s for block in blocks]) - self.head.opened_s
        lengths = np.array([block.count for block in blocks])
        first = np.array([block.first_index for block in blocks], dtype=np.int64)
        starts = np.cumsum(lengths) - lengths
        index = np.repeat(first - starts, lengths) + np.arange(counts.shape[0])
        return Rows(place, index, time_s, counts, self._scale(place, counts))

    def _scale(self, place: int, counts: Floats) -> Floats:
        channels = self.head.sources[place].channels
        scale = np.array([channel.scale for channel in channels])
        offset = np.array([channel.offset for channel in channels])
        sign = np.array([channel.sign for channel in channels])
        values: Floats = sign * (counts * scale + offset)
        return values


def run_event(fields: Mapping[str, Any], sequence: int, opened_s: float) -> dict[str, Any]:
    """An event as RunData holds it: sequence added, instants counted from the opening, cards left out."""
    event = dict(fields)
    if event.get("event") == OPENED:
        for key in CARD_KEYS:
            event.pop(key, None)
    for key in INSTANT_KEYS:
        if isinstance(event.get(key), float | int) and not isinstance(event[key], bool):
            event[key] = event[key] - opened_s
    event["sequence"] = sequence
    return event


def is_event(entry: Entry, name: str) -> bool:
    """Whether that entry is the named event; cheap for everything else."""
    needle = name.encode()
    return (
        entry.kind is Kind.EVENT
        and needle in entry.payload
        and unpack_event(entry.payload).get("event") == name
    )
