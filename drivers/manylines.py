"""ManyLines: the lines of many reads at once, and which read completed which. For recomputation; pure.

It only looks: which reads can be taken as plain rows, and what the framer holds before each of them. Whatever is not
plain is left to the decoder, read by read.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import accumulate

import numpy as np

from daq.stream.block import Floats
from drivers.rowblock import RowBlock


@dataclass(frozen=True, slots=True, eq=False)
class ManyLines:
    """rows: lines each read completed; last_bytes: length of the last of them with its end; first_row: (reads + 1,)
    lines before each read; rest_at: (reads + 1,) the unended line before each; odd: reads that hold another line."""

    values: Floats
    rows: list[int]
    last_bytes: list[int]
    first_row: list[int]
    rest_at: list[bytes]
    odd: list[int]

    @staticmethod
    def of(
        block: RowBlock, line_end: bytes, line_bytes_max: int, rest: bytes, pieces: Sequence[bytes]
    ) -> ManyLines | None:
        """None where nothing can be said: no whole line, or one that is longer than a line may be."""
        data = rest + b"".join(pieces)
        cut = data.rfind(line_end) + len(line_end)
        if cut < len(line_end) or len(data) - cut > line_bytes_max:
            return None
        certified = block.certify(data[:cut])
        length = certified.stop - certified.start
        if int(length.max()) > line_bytes_max:
            return None
        ends = certified.stop + len(line_end)
        read_ends = np.array(list(accumulate(map(len, pieces), initial=len(rest))))
        first_row = np.searchsorted(ends, read_ends, side="right")
        rows = np.diff(first_row)
        last = np.maximum(first_row[1:] - 1, 0)
        last_bytes = np.where(rows > 0, length[last] + len(line_end), 0)
        begins = np.concatenate(([0], ends))[first_row]
        rest_at = [data[begin:end] for begin, end in zip(begins.tolist(), read_ends.tolist(), strict=True)]
        odd_rows = np.flatnonzero(~certified.plain)
        odd = np.unique(np.searchsorted(first_row, odd_rows, side="right") - 1)
        return ManyLines(
            certified.values,
            rows.tolist(),
            last_bytes.tolist(),
            first_row.tolist(),
            rest_at,
            odd.tolist(),
        )

    def plain_until(self, at: int) -> int:
        """From that read on, the first that has to be fed by itself."""
        return next((read for read in self.odd if read >= at), len(self.rows))
