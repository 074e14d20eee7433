"""The two kinds of number the formulae take: one float, or an array of them."""

from __future__ import annotations

from typing import TypeAlias, TypeVar

import numpy as np
import numpy.typing as npt

Floats: TypeAlias = npt.NDArray[np.float64]
Quantity = TypeVar("Quantity", float, Floats)
