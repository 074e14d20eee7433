"""LinkHealth: does a link bring far more rows or far more garbage than it may. Pure; returns values, stops
nothing.

Two buckets that leak: rows at 1.5 times the declared rate, garbage at a few bytes a second. A stall shorter
than the link's silence limit fills no bucket, for its rows were due; a flood of ten times the rate shows
within 100 ms.
"""

from __future__ import annotations

from collections.abc import Sequence
from enum import StrEnum

from daq.cards.derived import silence_s
from daq.cards.frame import Link
from drivers.decoded import Decoded

RATE_FACTOR = 1.5
BURST_S = 0.1
"""Rows that may come at once beyond what a stall up to the silence limit holds back."""
GARBAGE_BYTES_MAX = 4096
GARBAGE_BYTES_S = 64.0
"""A line with now and then a damaged row stays below; noise at any usual speed does not."""


class LinkFault(StrEnum):
    TOO_FAST = "too_fast"  # more rows than the card declares, by far
    GARBAGE = "garbage"  # the resynchronisation budget is spent


class LinkHealth:
    """Carried state of one link since its port was opened."""

    def __init__(self, link: Link) -> None:
        self._rate_hz = link.rate_hz
        self._rows_max = link.rate_hz * (silence_s(link) + BURST_S)
        self._rows = 0.0
        self._garbage_bytes = 0.0
        self._last_s: float | None = None

    def judge(self, decoded: Decoded, now_s: float) -> tuple[LinkFault, ...]:
        """After every feed. A fault is returned as long as it lasts."""
        self._take(decoded.rows + sum(decoded.rejected.values()), decoded.discarded_bytes, now_s)
        return self._faults()

    def judge_many(self, rows: Sequence[int], moments_s: Sequence[float]) -> tuple[LinkFault, ...]:
        """The same for reads of plain rows, one after the other: what the last of them is judged as."""
        for count, now_s in zip(rows, moments_s, strict=True):
            self._take(count, 0, now_s)
        return self._faults()

    def _take(self, rows: int, garbage_bytes: int, now_s: float) -> None:
        passed_s = 0.0 if self._last_s is None else max(now_s - self._last_s, 0.0)
        self._last_s = now_s
        self._rows = max(self._rows - passed_s * self._rate_hz * RATE_FACTOR, 0.0) + rows
        self._garbage_bytes = max(self._garbage_bytes - passed_s * GARBAGE_BYTES_S, 0.0) + garbage_bytes

    def _faults(self) -> tuple[LinkFault, ...]:
        faults = []
        if self._rows > self._rows_max + self._rate_hz * RATE_FACTOR * BURST_S:
            faults.append(LinkFault.TOO_FAST)
        if self._garbage_bytes > GARBAGE_BYTES_MAX:
            faults.append(LinkFault.GARBAGE)
        return tuple(faults)
