"""Which misfortunes are due: counts times and forces from their anchors. Says what is due; never does it."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace

from simulator.faults import AnyFault


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
