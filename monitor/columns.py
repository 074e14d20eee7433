"""Columns of a look back into arrays: None becomes NaN. Pure."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from daq.stream.block import Floats


def columns_of(trace: Mapping[str, Sequence[float | None]]) -> dict[str, Floats]:
    """name -> (n,) float64."""
    return {
        name: np.array([np.nan if value is None else value for value in column], dtype=np.float64)
        for name, column in trace.items()
    }
