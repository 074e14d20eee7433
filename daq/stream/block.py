"""Block: numbers decoded from one link, as the device gave them. Knows nothing of units or limits."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
import numpy.typing as npt

Floats: TypeAlias = npt.NDArray[np.float64]

GAP_UNKNOWN = -1


@dataclass(frozen=True, slots=True, eq=False)
class Block:
    """Consecutive samples of one source.

    source: place of the link in the frame card, 0-based.
    first_index: running number of the first sample of that source since the port was opened, unwrapped to 64 bit.
    time_s: (n,) sample times on the bench's monotonic clock, s, strictly increasing, read-only.
    counts: (n, k) device numbers in the card's channel order for that source, read-only; NaN = undecodable.
    gap_samples: samples known to be missing directly before the first; GAP_UNKNOWN where the number is not known.
    """

    source: int
    first_index: int
    time_s: Floats
    counts: Floats
    gap_samples: int = 0

    def __post_init__(self) -> None:
        assert self.counts.ndim == 2 and self.counts.shape[0] == self.time_s.shape[0]
        self.time_s.flags.writeable = False
        self.counts.flags.writeable = False

    @property
    def count(self) -> int:
        return int(self.time_s.shape[0])


def after_loss(block: Block) -> Block:
    """The first block of a link that is open again after a loss: nobody knows how many samples are missing."""
    return Block(block.source, block.first_index, block.time_s, block.counts, GAP_UNKNOWN)
