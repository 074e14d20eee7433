"""Continuity: does each block follow the one before, and does every row received end up somewhere. Pure.

    received = kept + rejected (by reason); and every missing sample of the device is a listed gap

It refuses to interpolate, to reorder and to drop by itself: it says what is missing and what is there twice.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass
from enum import Enum

from daq.stream.block import GAP_UNKNOWN

REPEATED = "repeated"
"""Reason under which rows that were there before are counted as rejected."""


class Join(Enum):
    """How a block follows the one before."""

    FIRST = "first"
    CONTIGUOUS = "contiguous"
    GAP = "gap"
    OVERLAP = "overlap"
    DUPLICATE = "duplicate"


@dataclass(frozen=True, slots=True)
class Continuation:
    """missing: samples lost directly before the block, GAP_UNKNOWN where the number is not known.
    repeated: leading rows that were there before; the rest is new."""

    join: Join
    missing: int = 0
    repeated: int = 0


@dataclass(frozen=True, slots=True)
class Account:
    """What became of the rows of one source."""

    received: int
    kept: int
    rejected: Mapping[str, int]
    missing: int
    gaps: int
    gaps_of_unknown_length: int

    @property
    def residual(self) -> int:
        """Rows that vanished: anything but 0 is a fault of ours."""
        return self.received - self.kept - sum(self.rejected.values())


class Continuity:
    """One per source."""

    def __init__(self) -> None:
        self._next_index: int | None = None
        self._received = 0
        self._kept = 0
        self._rejected: Counter[str] = Counter()
        self._missing = 0
        self._gaps = 0
        self._gaps_unknown = 0

    def judge(self, first_index: int, count: int, gap_samples: int = 0) -> Continuation:
        """A decoded block of `count` rows; `gap_samples` as its decoder has set it."""
        assert count > 0
        self._received += count
        expected = self._next_index if self._next_index is not None else first_index
        repeated = min(max(expected - first_index, 0), count)
        self._rejected[REPEATED] += repeated
        self._kept += count - repeated
        join = Join.FIRST if self._next_index is None else Join.CONTIGUOUS
        self._next_index = max(expected, first_index + count)
        if repeated:
            return Continuation(Join.DUPLICATE if repeated == count else Join.OVERLAP, repeated=repeated)
        return self._judge_gap(join, first_index - expected, gap_samples)

    def reject(self, reason: str, rows: int) -> None:
        """Rows that were received and could not be decoded."""
        assert rows >= 0
        self._received += rows
        self._rejected[reason] += rows

    def account(self) -> Account:
        """The balance so far."""
        return Account(
            received=self._received,
            kept=self._kept,
            rejected={reason: rows for reason, rows in sorted(self._rejected.items()) if rows},
            missing=self._missing,
            gaps=self._gaps,
            gaps_of_unknown_length=self._gaps_unknown,
        )

    def _judge_gap(self, join: Join, jump: int, gap_samples: int) -> Continuation:
        missing = max(jump, gap_samples)
        if missing <= 0 and gap_samples != GAP_UNKNOWN:
            return Continuation(join)
        self._gaps += 1
        if gap_samples == GAP_UNKNOWN and jump <= 0:
            self._gaps_unknown += 1
            return Continuation(Join.GAP, missing=GAP_UNKNOWN)
        self._missing += missing
        return Continuation(Join.GAP, missing=missing)
