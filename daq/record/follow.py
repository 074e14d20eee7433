"""Follow: cuts the stream of entries into runs. Knows where one begins and ends, and nothing of files.

Between runs only the last few entries are remembered: they hold the beginning of the first row, which a
decoder needs to rebuild it from the raw bytes.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass
from typing import TypeAlias

from daq.record.head import Head, head_of_entry
from daq.record.rows import CLOSED, OPENED, is_event
from daq.stream.entry import Entry, Kind, Packed, unpack

LEAD_IN_ENTRIES = 64

Carried: TypeAlias = tuple[Entry, bytes]
"""An entry and its own bytes."""


@dataclass(frozen=True, slots=True)
class Opened:
    """A run begins; its run_opened entry follows as Within."""

    head: Head
    lead_in: tuple[Carried, ...]


@dataclass(frozen=True, slots=True)
class Within:
    """An entry of the open run."""

    entry: Entry
    packed: bytes


@dataclass(frozen=True, slots=True)
class Ended:
    """The run is over. closed: by its run_closed, which was Within; else the next run began without one."""

    after_sequence: int
    closed: bool


Found: TypeAlias = Opened | Within | Ended


class Follower:
    """Feed pieces of the stream in order; every entry passes once."""

    def __init__(self) -> None:
        self._lead_in: deque[Carried] = deque(maxlen=LEAD_IN_ENTRIES)
        self.open = False
        self.last_sequence = 0

    @property
    def needed_from(self) -> int:
        """Between runs: the first sequence that a run beginning next may still need."""
        return self._lead_in[0][0].sequence if self._lead_in else self.last_sequence + 1

    def feed(self, packed: Packed) -> Iterator[Found]:
        """What the piece holds. The caller may stop in between and go on later with the same iterator."""
        offset = 0
        while offset < len(packed.data):
            entry, end = unpack(packed.data, offset)
            yield from self._take(entry, packed.data[offset:end])
            offset = end

    def _take(self, entry: Entry, data: bytes) -> Iterator[Found]:
        if entry.kind is Kind.EVENT and is_event(entry, OPENED):
            if self.open:
                yield Ended(self.last_sequence, closed=False)
            self.open = True
            yield Opened(head_of_entry(entry), tuple(self._lead_in))
            self._lead_in.clear()
        self.last_sequence = entry.sequence
        if not self.open:
            self._lead_in.append((entry, data))
            return
        yield Within(entry, data)
        if entry.kind is Kind.EVENT and is_event(entry, CLOSED):
            self.open = False
            yield Ended(entry.sequence, closed=True)
