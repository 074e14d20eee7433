"""Thinning by extremes in time order: neither a one-sample spike nor an unloading branch is ever hidden. Pure."""

from __future__ import annotations

from itertools import pairwise

import numpy as np

from daq.stream.block import Floats


def thin_minmax(table: Floats, column: int, rows_max: int) -> Floats:
    """Keep first, lowest, highest and last row (by `column`) of equal stretches; (n, k) -> (<= rows_max, k).

    NaN rows count as lowest, so that a hole stays visible.
    """
    assert rows_max >= 4
    count = len(table)
    if count <= rows_max:
        return table
    stretches = rows_max // 4
    edges = np.linspace(0, count, stretches + 1).astype(np.int64)
    values = np.where(np.isnan(table[:, column]), -np.inf, table[:, column])
    keep: set[int] = set()
    for start, end in pairwise(edges):
        part = values[start:end]
        keep.update((start, start + int(part.argmin()), start + int(part.argmax()), end - 1))
    return table[np.array(sorted(keep), dtype=np.int64)]
