"""Sorting: what the bytes of one feed turned out to be, in order: rows, replies, rejects. Shared by all
dialects."""

from __future__ import annotations

import numpy as np

from daq.stream.block import Block, Floats
from drivers.decoded import NO_REJECTS, Decoded, Reason, add_counts
from drivers.numbering import Numbering


def decoded_block(block: Block, arrival_s: float, fresh_from_s: float) -> Decoded:
    """One feed that was one plain row."""
    return Decoded((block,), (), (), 0, NO_REJECTS, block.count if arrival_s < fresh_from_s else 0)


class Sorting:
    """Filled while one feed is sorted, then turned into its Decoded."""

    def __init__(self, broken: bool) -> None:
        self.broken = broken  # something was thrown away since the last row
        self.row_bytes = 0
        self._replies: list[bytes] = []
        self._rejected: dict[str, int] = {}
        self._discarded_bytes = 0
        self._breaks: list[int] = []
        self._rows: list[tuple[float, ...]] = []
        self._parts: list[Floats] = []
        self._count = 0

    def add_row(self, row: tuple[float, ...]) -> None:
        if self.broken:
            self._note_break()
        self._rows.append(row)
        self._count += 1

    def add_block(self, values: Floats) -> None:
        if not len(values):
            return
        if self.broken:
            self._note_break()
        self._flush()
        self._parts.append(values)
        self._count += len(values)

    def add_reply(self, text: bytes) -> None:
        self._replies.append(text)

    def reject(self, reason: Reason) -> None:
        self._rejected[reason] = self._rejected.get(reason, 0) + 1
        self.broken = True

    def discard(self, count: int) -> None:
        self._discarded_bytes += count

    def decoded(
        self, numbering: Numbering, arrival_s: float, on_wire_s: float, fresh_from_s: float
    ) -> Decoded:
        """Number and time the rows. on_wire_s: transmission time of the last row; fresh_from_s: no longer
        stale."""
        values = self._matrix()
        rejected = self._rejected or NO_REJECTS
        replies = tuple(self._replies)
        if values is None:
            return Decoded((), replies, (), self._discarded_bytes, rejected)
        numbered = numbering.number(values, self._breaks, arrival_s - on_wire_s)
        if numbered.rejected:
            add_counts(self._rejected, numbered.rejected)
            rejected = self._rejected
        stale = sum(block.count for block in numbered.blocks) if arrival_s < fresh_from_s else 0
        return Decoded(numbered.blocks, replies, numbered.inputs, self._discarded_bytes, rejected, stale)

    def _matrix(self) -> Floats | None:
        if not self._parts:
            return np.array(self._rows, dtype=np.float64) if self._rows else None
        self._flush()
        return np.concatenate(self._parts) if len(self._parts) > 1 else self._parts[0]

    def _note_break(self) -> None:
        self._breaks.append(self._count)
        self.broken = False

    def _flush(self) -> None:
        if self._rows:
            self._parts.append(np.array(self._rows, dtype=np.float64))
            self._rows = []
