"""Random firing order with a stored seed, batches spread evenly. Draws no random number: seed in, order out.

The order comes from SHA-256 of seed and number, so that it is the same on every computer and in every version.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Turn:
    """One bar in the order of firing; place counts from 1."""

    place: int
    number: str
    batch: str


def firing_order(bars: Sequence[tuple[str, str]], seed: int) -> tuple[Turn, ...]:
    """(number, batch) of each bar in random order; every stretch of the order holds its share of each batch.

    Each batch is put in random order; its k-th bar of n falls at a random place of the k-th n-th of the sitting.
    ValueError: a number twice.
    """
    numbers = [number for number, _ in bars]
    if len(set(numbers)) != len(numbers):
        twice = sorted({number for number in numbers if numbers.count(number) > 1})
        raise ValueError(f"bars twice: {', '.join(twice)}")
    placed: list[tuple[float, str, str]] = []
    for batch in dict.fromkeys(batch for _, batch in bars):
        own = sorted((n for n, b in bars if b == batch), key=lambda n: _share(seed, "order", batch, n))
        for rank, number in enumerate(own):
            placed.append(((rank + _share(seed, "place", batch, number)) / len(own), number, batch))
    return tuple(
        Turn(place, number, batch) for place, (_, number, batch) in enumerate(sorted(placed), start=1)
    )


def _share(seed: int, *words: str) -> float:
    """A number in [0, 1) that only seed and words decide."""
    text = "\x1f".join((str(seed), *words)).encode()
    return int.from_bytes(hashlib.sha256(text).digest()[:7], "big") / 2.0**56
