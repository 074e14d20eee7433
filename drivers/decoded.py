"""What a decoder hands out: blocks, replies, status inputs and the account of what it threw away. Values
only."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from enum import StrEnum
from typing import Protocol, runtime_checkable

from daq.cards.frame import InputName
from daq.stream.block import Block

STALE_S = 0.05
"""Rows that arrive sooner than this after the first byte since opening may have been buffered before:
marked."""


class Reason(StrEnum):
    """Why a row was rejected."""

    CHECKSUM = "checksum"  # the declared check does not match
    FIELDS = "fields"  # too few or too many fields, or a label missing
    LABEL = "label"  # a label twice
    NUMBER = "number"  # a field that is no finite number
    UNIT = "unit"  # a unit behind the number that is not the declared one
    PREFIX = "prefix"  # looks like a row but does not begin like one
    PARTIAL = "partial"  # the first line since opening: its beginning may be missing
    OVERLONG = "overlong"  # longer than the card allows
    TEXT = "text"  # neither a row nor printable
    STATUS = "status"  # a status field that holds no integer
    TIME = "time"  # a device time that cannot be one
    COUNTER = "counter"  # a counter that is no whole number within its modulus
    DUPLICATE = "duplicate"  # the same counter again
    ORDER = "order"  # a counter that went back
    LEAP = "leap"  # a counter that leapt further than can have been missed


NO_REJECTS: Mapping[str, int] = {}


@dataclass(frozen=True, slots=True)
class InputSample:
    """A status input read from a column: the first reading and every change. Fresh rows keep it valid."""

    name: InputName
    active: bool
    time_s: float


@dataclass(frozen=True, slots=True, eq=False)
class Decoded:
    """One feed's yield.

    discarded_bytes: received bytes that became neither an accepted row nor a reply (rejected lines
    included), so received = rows + replies + discarded + still buffered.
    rejected: Reason -> rows.
    stale_rows: that many of the rows here, from the first on, may have been buffered before the port was
    opened.
    """

    blocks: tuple[Block, ...] = ()
    replies: tuple[bytes, ...] = ()
    inputs: tuple[InputSample, ...] = ()
    discarded_bytes: int = 0
    rejected: Mapping[str, int] = field(default_factory=lambda: NO_REJECTS)
    stale_rows: int = 0

    @property
    def rows(self) -> int:
        return sum(block.count for block in self.blocks)


@dataclass(frozen=True, slots=True, eq=False)
class PlainReads:
    """Several reads that were nothing but rows which count on: one block of them all, and how many rows each read
    completed. Cut at the reads it is what feeding them one by one gives.
    """

    block: Block
    rows: Sequence[int]


class Decoder(Protocol):
    """Bytes of one link in, values out; any cut of the bytes gives the same rows, replies and counts."""

    def feed(self, data: bytes, arrival_s: float) -> Decoded:
        """Decode what arrived. Never raises on bytes, never keeps more than a few kilobytes."""
        ...


@runtime_checkable
class Peeks(Protocol):
    """A decoder that can read rows before it takes them: numbering, timing and making a block take longer."""

    def peek(self, data: bytes, ahead: int) -> list[tuple[float, ...]] | None:
        """The rows of these bytes, channels first, were they to come after `ahead` rows that have not been fed yet;
        None where they are not just whole rows that simply follow, without a gap or an input that moves. Changes
        nothing; what is returned is what `feed` will make of them.
        """
        ...


def add_counts(into: dict[str, int], more: Mapping[str, int]) -> None:
    """Add the counts of `more` to `into`."""
    for reason, rows in more.items():
        into[reason] = into.get(reason, 0) + rows
