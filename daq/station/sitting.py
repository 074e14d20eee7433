"""The sitting: one series at one frame, bar by bar. Pure: knows which bar is next and which numbers are used up.

A broken bar can never be loaded again; an interrupted one gets a new loading number; no number is ever reused.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from enum import Enum
from typing import Any

from daq.cards.load import LoadedSeries
from daq.cards.series import Specimen
from daq.errors import Refused


class BarState(Enum):
    WAITING = "waiting"
    OPEN = "open"
    SEALING = "sealing"
    BROKEN = "broken"
    INTERRUPTED = "interrupted"


@dataclass(frozen=True, slots=True)
class Bar:
    """One bar of the bench sheet and what became of it. loadings: how many have been opened so far."""

    specimen: Specimen
    state: BarState = BarState.WAITING
    loadings: int = 0
    run_id: str = ""
    result: Mapping[str, Any] = field(default_factory=dict)
    record: str = ""
    interrupted: bool = False  # the run that is being sealed broke nothing

    @property
    def to_be_broken(self) -> bool:
        """An interrupted bar lies on the rollers still: it stays the next one also while its record is being sealed."""
        return self.state in (BarState.WAITING, BarState.INTERRUPTED) or (
            self.state is BarState.SEALING and self.interrupted
        )


@dataclass(frozen=True, slots=True)
class Sealed:
    """A sealed record as found on disk or reported by the archivist."""

    specimen: str
    loading: int
    run_id: str
    interrupted: bool
    record: str
    result: Mapping[str, Any]


@dataclass(frozen=True, slots=True)
class Unsealed:
    """A run that is no record yet, as the archivist knows it from the journal. closed: it has ended."""

    run_id: str
    series: str
    specimen: str
    loading: int
    closed: bool
    interrupted: bool


class Sitting:
    """Bars in firing order. Every change comes through one of the methods below."""

    def __init__(self, loaded: LoadedSeries, found: Sequence[Sealed] = ()) -> None:
        self.loaded = loaded
        self._bars = {specimen.number: Bar(specimen) for specimen in loaded.specimens}
        for sealed in sorted(found, key=lambda one: one.loading):
            self.sealed(sealed)

    @property
    def bars(self) -> tuple[Bar, ...]:
        return tuple(self._bars.values())

    @property
    def loaded_numbers(self) -> frozenset[str]:
        return frozenset(self._bars)

    @property
    def broken_count(self) -> int:
        return sum(bar.state is BarState.BROKEN for bar in self.bars)

    @property
    def done(self) -> bool:
        return self.broken_count == len(self.bars)

    def next_number(self) -> str | None:
        """The first bar that still has to be broken."""
        return next((bar.specimen.number for bar in self.bars if bar.to_be_broken), None)

    def why_none(self) -> str:
        """Why there is no next bar."""
        if self.done:
            return f"every bar of {self.loaded.card.name} is broken"
        busy = next(bar for bar in self.bars if bar.state in (BarState.OPEN, BarState.SEALING))
        word = "called already" if busy.state is BarState.OPEN else "being sealed; try again in a moment"
        return f"bar {busy.specimen.number} is {word}"

    def place_of(self, number: str) -> int:
        """1-based place in the firing order."""
        return list(self._bars).index(number) + 1

    def bar(self, number: str) -> Bar:
        """Raises Refused for a number that is not on the bench sheet."""
        if number not in self._bars:
            raise Refused("mount", (f"bar {number!r} is not on the bench sheet of {self.loaded.card.name}",))
        return self._bars[number]

    def open(self, number: str, run_id: str) -> int:
        """Open the next loading of a bar and return its number. Raises Refused where the bar is used up."""
        bar = self.bar(number)
        if bar.state is BarState.BROKEN:
            raise Refused("mount", (f"bar {number} is broken already; its record is {bar.record}",))
        if bar.state in (BarState.OPEN, BarState.SEALING):
            word = "called already" if bar.state is BarState.OPEN else "being sealed; try again in a moment"
            raise Refused("mount", (f"bar {number} is {word}",))
        self._bars[number] = replace(bar, state=BarState.OPEN, loadings=bar.loadings + 1, run_id=run_id)
        return bar.loadings + 1

    def resume(self, number: str, loading: int, run_id: str) -> None:
        """The bench has this loading open already: the station, or the operator's terminal, was away meanwhile."""
        if number in self._bars:
            bar = self._bars[number]
            self._bars[number] = replace(bar, state=BarState.OPEN, loadings=loading, run_id=run_id)

    def refused(self, number: str) -> None:
        """The bench did not open the run: the bar is what it was before; its loading number is not reused."""
        bar = self._bars[number]
        state = BarState.INTERRUPTED if bar.record else BarState.WAITING
        self._bars[number] = replace(bar, state=state, run_id="")

    def unsealed(self, run: Unsealed) -> None:
        """The archivist's word of a run we may not have seen: we were away, or its series was opened only now."""
        bar = self._bars.get(run.specimen)
        if bar is None or run.series != self.loaded.card.name:
            return
        unknown = run.loading > bar.loadings
        if unknown or (bar.state is BarState.OPEN and bar.run_id == run.run_id and run.closed):
            self._bars[run.specimen] = replace(
                bar,
                state=BarState.SEALING if run.closed else BarState.OPEN,
                loadings=run.loading,
                run_id=run.run_id,
                interrupted=run.interrupted,
            )

    def closed(self, run_id: str, *, interrupted: bool) -> None:
        """The bench has closed the run; the record is being sealed."""
        for number, bar in self._bars.items():
            if bar.run_id == run_id and bar.state is BarState.OPEN:
                self._bars[number] = replace(bar, state=BarState.SEALING, interrupted=interrupted)

    def sealed(self, sealed: Sealed) -> None:
        """A record stands on disk. One of another sheet's bar is none of ours."""
        bar = self._bars.get(sealed.specimen)
        if bar is None:
            return
        state = BarState.INTERRUPTED if sealed.interrupted else BarState.BROKEN
        if bar.state is BarState.BROKEN:
            state = BarState.BROKEN  # once broken, always broken
        self._bars[sealed.specimen] = replace(
            bar,
            state=state,
            loadings=max(bar.loadings, sealed.loading),
            run_id=sealed.run_id,
            result=sealed.result,
            record=sealed.record,
        )

    def as_json(self) -> dict[str, Any]:
        """For viewers: every bar in order with what became of it."""
        return {
            "series": self.loaded.card.name,
            "operator": self.loaded.card.operator,
            "method": self.loaded.method.name,
            "fixture": self.loaded.card.fixture,
            "next": self.next_number(),
            "method_card": self.loaded.method.model_dump(mode="json"),
            "bars": [
                {
                    "number": bar.specimen.number,
                    "specimen": bar.specimen.model_dump(mode="json"),
                    "state": bar.state.value,
                    "loading": bar.loadings,
                    "record": bar.record,
                    "result": dict(bar.result),
                }
                for bar in self.bars
            ],
        }
