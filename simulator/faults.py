"""Misfortunes: the card's schedule of what goes wrong, and when. Says what is due; never does it.

A fault waits for its anchor (a time or a force), fires once (or once per bar with `every_bar`), and may last
`for_s`. Hands may fire one at once.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Annotated, Literal, TypeAlias

from pydantic import Field, model_validator

from daq.cards.base import Card, Name, NotNegative, Positive

SensorKind = Literal["freeze", "zeros", "nan", "saturation", "wrong-polarity"]
WireKind = Literal["stream-end", "garbage", "reconnect"]
MachineKind = Literal["deaf", "stop-ignored", "drive-fault", "shield-open", "emergency-stop", "mute"]


class Fault(Card):
    """Base: when. Give at most one of the anchors; without any the fault is there from the beginning.

    at_s: since power-on. after_start_s: since the crosshead was last told to move towards the bar.
    after_contact_s: since the bar was touched. at_force_n: true force on the bar, rising.
    """

    at_s: NotNegative | None = None
    after_start_s: NotNegative | None = None
    after_contact_s: NotNegative | None = None
    at_force_n: Positive | None = None
    bar: Annotated[int, Field(ge=1)] | None = None  # only while the bar mounted as this one is in
    every_bar: bool = False
    for_s: Positive | None = None  # None: until cleared

    @model_validator(mode="after")
    def _one_anchor(self) -> Fault:
        anchors = (self.at_s, self.after_start_s, self.after_contact_s, self.at_force_n)
        if sum(anchor is not None for anchor in anchors) > 1:
            raise ValueError("give at most one of at_s, after_start_s, after_contact_s, at_force_n")
        return self


class Glitch(Fault):
    """A spike of some samples on one channel."""

    kind: Literal["glitch"]
    channel: str = "force"
    size: float  # in the channel's unit
    samples: Annotated[int, Field(ge=1, le=1000)] = 1


class SensorFault(Fault):
    """One channel stuck, at exact zero counts, not a number, at its upper rail, or its wires reversed.

    Integers cannot say "not a number": there `nan` is the lower rail.
    """

    kind: SensorKind
    channel: str = "force"


class UnitSlip(Fault):
    """The channel suddenly speaks another unit: 0.001 (kN for N), 0.101972 (kgf), 0.224809 (lbf)."""

    kind: Literal["unit-slip"]
    channel: str = "force"
    factor: float


class Drift(Fault):
    """The channel walks away."""

    kind: Literal["drift"]
    channel: str = "force"
    per_s: float  # channel unit per second


class NoiseBurst(Fault):
    """More Gaussian noise."""

    kind: Literal["noise"]
    channel: str = "force"
    sigma: Positive


class Rows(Fault):
    """Rows lost between machine and host, or sent twice."""

    kind: Literal["dropped", "duplicated"]
    link: Name | None = None  # None: every link
    rows: Annotated[int, Field(ge=1, le=100_000)] = 1


class WireFault(Fault):
    """No rows any more; random bytes for rows; or the port vanishes and comes back after for_s."""

    kind: WireKind
    link: Name | None = None


class MachineFault(Fault):
    """deaf: STOP unheard. stop-ignored: STOP answered, motion goes on. mute: no answers. Others: inputs."""

    kind: MachineKind


class SpeedSlip(Fault):
    """The drive runs at a multiple of what it was told: 60 is mm/s taken for mm/min."""

    kind: Literal["speed-slip"]
    factor: Positive


class Slip(Fault):
    """The bar or a roller shifts: the force drops, the stiffness stays."""

    kind: Literal["slip"]
    percent: Annotated[float, Field(gt=0, lt=100)]


class PopIn(Fault):
    """An arrested crack: the force drops, the bar is softer from then on. breaks_at_n: its end for good."""

    kind: Literal["pop-in"]
    percent: Annotated[float, Field(gt=0, lt=100)]
    stiffness_factor: Annotated[float, Field(gt=0, le=1)]
    breaks_at_n: Positive | None = None


class Fixturing(Fault):
    """What is in the fixture instead of a bar: nothing, or something that does not give (whole train)."""

    kind: Literal["no-specimen", "blocked"]
    stiffness_n_mm: Positive = 20_000.0


class HalvesLeft(Fault):
    """A piece rests on the fixture and is weighed by a cell under the supports."""

    kind: Literal["halves-left"]
    force_n: Positive


AnyFault: TypeAlias = Annotated[
    Glitch
    | SensorFault
    | UnitSlip
    | Drift
    | NoiseBurst
    | Rows
    | WireFault
    | MachineFault
    | SpeedSlip
    | Slip
    | PopIn
    | Fixturing
    | HalvesLeft,
    Field(discriminator="kind"),
]


@dataclass(frozen=True, slots=True)
class Waiting:
    """A scheduled fault. armed_s: when its anchor happened, None while it has not."""

    fault: AnyFault
    armed_s: float | None
    fired_on_bar: int | None = None


class Schedule:
    """Which faults are due. Tell it of starts, contacts and bars; ask for the next moment and force."""

    def __init__(self, faults: Iterable[AnyFault]) -> None:
        self._waiting = [Waiting(fault, _armed_from_power_on(fault)) for fault in faults]
        self._bar = 0

    def mounted(self) -> None:
        """Another bar is in the fixture: anchors of the last one are forgotten."""
        self._bar += 1
        self._waiting = [
            replace(w, fired_on_bar=None, armed_s=None if _counts_from_bar(w.fault) else w.armed_s)
            for w in self._waiting
        ]

    def started(self, now_s: float) -> None:
        """The crosshead was told to move towards the bar."""
        self._arm(now_s, "after_start_s")

    def touched(self, now_s: float) -> None:
        """The bar was touched."""
        self._arm(now_s, "after_contact_s")

    def next_s(self) -> float:
        """The earliest time at which a fault is due; infinite where none is."""
        return min((_due_s(w) for w in self._waiting if self._open(w)), default=float("inf"))

    def next_force_n(self) -> float:
        """The lowest true force at which a fault is due."""
        levels_n = (waiting.fault.at_force_n for waiting in self._waiting if self._open(waiting))
        return min((level_n for level_n in levels_n if level_n is not None), default=float("inf"))

    def due(self, now_s: float, force_n: float) -> tuple[AnyFault, ...]:
        """Take what is due by this time or force."""
        out: list[AnyFault] = []
        kept: list[Waiting] = []
        for waiting in self._waiting:
            level_n = waiting.fault.at_force_n
            reached = force_n >= level_n if level_n is not None else _due_s(waiting) <= now_s
            if not (self._open(waiting) and reached):
                kept.append(waiting)
                continue
            out.append(waiting.fault)
            if waiting.fault.every_bar:
                kept.append(replace(waiting, fired_on_bar=self._bar))
        self._waiting = kept
        return tuple(out)

    def clear(self) -> None:
        """Forget everything that has not happened yet."""
        self._waiting = []

    def _open(self, waiting: Waiting) -> bool:
        on_this_bar = waiting.fault.bar is None or waiting.fault.bar == self._bar
        return on_this_bar and waiting.fired_on_bar is None

    def _arm(self, now_s: float, anchor: str) -> None:
        self._waiting = [
            replace(w, armed_s=now_s)
            if w.armed_s is None and getattr(w.fault, anchor) is not None and self._open(w)
            else w
            for w in self._waiting
        ]


def _counts_from_bar(fault: AnyFault) -> bool:
    return fault.after_start_s is not None or fault.after_contact_s is not None


def _armed_from_power_on(fault: AnyFault) -> float | None:
    return None if _counts_from_bar(fault) or fault.at_force_n is not None else 0.0


def _due_s(waiting: Waiting) -> float:
    fault = waiting.fault
    if waiting.armed_s is None:
        return float("inf")
    delays_s = (fault.at_s, fault.after_start_s, fault.after_contact_s)
    return waiting.armed_s + next((delay_s for delay_s in delays_s if delay_s is not None), 0.0)
