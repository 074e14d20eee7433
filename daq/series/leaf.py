"""Leaf: one loading as a report shows it. Made by the shell from a record and its notes; opens nothing itself."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from daq.cards.method import MethodCard
from daq.mechanics.quantity import Floats
from daq.results.secondlook import off_by
from daq.results.standing import Standing
from daq.series.analysis import Analysis, analyse
from daq.series.bars import Bar, bar_of


@dataclass(frozen=True, slots=True, eq=False)
class Leaf:
    """meta: of the record (specimen, loading, created_utc, sha256, midspan_version, simulated, path as a name only).

    trace: columns to draw by name. notes: how many; head: digest of the last one; problems of the notes.
    """

    name: str
    meta: Mapping[str, Any]
    standing: Standing
    trace: Mapping[str, Floats]
    gaps: int
    notes: int
    head: str
    problems: tuple[str, ...]

    @property
    def number(self) -> str:
        return str(self.meta["specimen"])

    @property
    def loading(self) -> int:
        return int(self.meta["loading"])

    def value(self, key: str) -> float | None:
        """A number of the result that stands."""
        found = self.standing.result.get(key)
        return None if isinstance(found, bool) or not isinstance(found, int | float) else float(found)


@dataclass(frozen=True, slots=True, eq=False)
class Series:
    """Leaves in the order of loading. left_out: records that could not be read, a line each."""

    title: str
    leaves: tuple[Leaf, ...]
    analysis: Analysis
    left_out: tuple[str, ...]

    @property
    def simulated(self) -> bool:
        """What is not known to be real never counts as real."""
        return any(leaf.meta.get("simulated") is not False for leaf in self.leaves)

    @property
    def method(self) -> MethodCard | None:
        return next((leaf.standing.setup.method for leaf in self.leaves if leaf.standing.setup.method), None)

    @property
    def bars(self) -> tuple[Bar, ...]:
        return bars_of(self.leaves)


def series_of(title: str, leaves: Sequence[Leaf], left_out: Sequence[str] = ()) -> Series:
    """Put together and analyse."""
    method = next((leaf.standing.setup.method for leaf in leaves if leaf.standing.setup.method), None)
    return Series(title, tuple(leaves), analyse(bars_of(leaves), method), tuple(left_out))


def bars_of(leaves: Sequence[Leaf]) -> tuple[Bar, ...]:
    return tuple(
        bar_of(leaf.standing, number=leaf.number, loading=leaf.loading, order=place)
        for place, leaf in enumerate(leaves, 1)
    )


def stiffness_ratios(moduli: Sequence[float | None]) -> list[float | None]:
    """Second look of each against the median of the others: its ratio where it is off, else None."""
    found: list[float | None] = []
    for place, own in enumerate(moduli):
        others = [value for at, value in enumerate(moduli) if value is not None and at != place]
        found.append(None if own is None else off_by(own, others))
    return found
