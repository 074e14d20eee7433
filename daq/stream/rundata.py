"""RunData: one loading as arrays and plain JSON values; what a record holds and what the reduction eats."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from daq.stream.block import Floats


@dataclass(frozen=True, slots=True, eq=False)
class ChannelData:
    """All samples of one channel. index (n,) int64 device sample number; time_s (n,) s since the run was opened;
    counts (n,) as the device gave them; value (n,) in `unit`, gross (never tared)."""

    name: str
    role: str
    unit: str
    index: npt.NDArray[np.int64]
    time_s: Floats
    counts: Floats
    value: Floats


@dataclass(frozen=True, slots=True, eq=False)
class RunData:
    """cards: {"frame":..., "method":..., "specimen":..., "run":...} exactly as resolved JSON values.
    events: in stream order, each {"event": name, "time_s": s since the run was opened, "sequence": int, ...}."""

    channels: Mapping[str, ChannelData]
    events: tuple[Mapping[str, Any], ...]
    cards: Mapping[str, Any]

    def by_role(self, role: str) -> ChannelData | None:
        """The first channel of that role, or None."""
        return next((channel for channel in self.channels.values() if channel.role == role), None)
