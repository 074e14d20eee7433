"""Story: what the events of a run say, picked out once. Believes an event only as far as its fields are
there.

Forces in events are gross; `net` here subtracts the tare. Names of events: daq.watch.catalogue.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

GRADUAL = "gradual failure"
DROPS = ("slip", "pop_in", "partial_drop")
BROKEN = ("sudden break", GRADUAL)


@dataclass(frozen=True, slots=True)
class FractureSeen:
    """The first fracture event. None: the event did not say."""

    verdict: str
    time_s: float | None
    last_good_index: int | None
    last_good_s: float | None
    first_dropped_s: float | None
    sigma_n: float | None
    delay_s: float | None


@dataclass(frozen=True, slots=True)
class Drop:
    """A slip, pop-in or unclear partial drop; gross load just before, and how far it fell."""

    name: str
    time_s: float
    load_n: float | None
    drop_n: float | None


@dataclass(frozen=True, slots=True)
class Tare:
    """The tare note."""

    tare_n: float
    time_s: float
    u_n: float | None
    sigma_n: float | None
    drift_n_min: float | None
    overridden: bool


@dataclass(frozen=True, slots=True)
class Story:
    """What happened, as far as the events tell."""

    tare: Tare | None
    started_s: float | None
    touched_s: float | None
    seated_s: float | None
    seated_load_n: float | None
    toe_offset_mm: float | None
    fracture: FractureSeen | None
    drops: tuple[Drop, ...]
    residual_n: float | None
    unloaded: bool | None
    shift_n: float | None
    shift_flagged: bool
    stiffness_ratio: float | None
    closed_verdict: str
    interrupted: bool | None
    reason: str
    counts: Mapping[str, int]

    def count(self, name: str) -> int:
        return self.counts.get(name, 0)

    @property
    def tare_n(self) -> float:
        """0 without a tare note: loads are gross then, and the result says so."""
        return 0.0 if self.tare is None else self.tare.tare_n

    @property
    def broken(self) -> bool:
        """A break is claimed only where the watch claimed one."""
        return self.fracture is not None and self.fracture.verdict in BROKEN


def number(event: Mapping[str, Any] | None, key: str) -> float | None:
    """A finite number of an event, else None."""
    value = None if event is None else event.get(key)
    if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
        return None
    return float(value)


def story_of(events: Sequence[Mapping[str, Any]]) -> Story:
    """Read the events in stream order."""
    first: dict[str, Mapping[str, Any]] = {}
    last: dict[str, Mapping[str, Any]] = {}
    for event in events:
        name = str(event.get("event", ""))
        first.setdefault(name, event)
        last[name] = event
    seated, closed = last.get("seated"), last.get("run_closed")
    residual, after = last.get("residual"), last.get("after_zero")
    interrupted = None if closed is None else closed.get("interrupted")
    return Story(
        tare=_tare(last.get("tared")),
        started_s=number(first.get("started"), "time_s"),
        touched_s=number(first.get("approach_touch"), "time_s"),
        seated_s=number(seated, "time_s"),
        seated_load_n=number(seated, "force_n"),
        toe_offset_mm=number(seated, "toe_offset_mm"),
        fracture=_fracture(first.get("fracture")),
        drops=tuple(_drop(event) for event in events if event.get("event") in DROPS),
        residual_n=number(residual, "force_n"),
        unloaded=None if residual is None else bool(residual.get("unloaded")),
        shift_n=number(after, "shift_n"),
        shift_flagged=bool(after is not None and after.get("flagged")),
        stiffness_ratio=number(last.get("second_look"), "ratio"),
        closed_verdict="" if closed is None else str(closed.get("verdict", "")),
        interrupted=None if interrupted is None else bool(interrupted),
        reason="" if closed is None else str(closed.get("reason", "")),
        counts=Counter(str(event.get("event", "")) for event in events),
    )


def _tare(event: Mapping[str, Any] | None) -> Tare | None:
    tare_n, time_s = number(event, "tare_n"), number(event, "time_s")
    if event is None or tare_n is None:
        return None
    return Tare(
        tare_n=tare_n,
        time_s=0.0 if time_s is None else time_s,
        u_n=number(event, "u_n"),
        sigma_n=number(event, "sigma_n"),
        drift_n_min=number(event, "drift_n_min"),
        overridden=bool(event.get("override_reason") or event.get("overridden")),
    )


def _fracture(event: Mapping[str, Any] | None) -> FractureSeen | None:
    if event is None:
        return None
    index = number(event, "last_good_index")
    return FractureSeen(
        verdict=str(event.get("verdict", "")),
        time_s=number(event, "time_s"),
        last_good_index=None if index is None else int(index),
        last_good_s=number(event, "last_good_s"),
        first_dropped_s=number(event, "first_dropped_s"),
        sigma_n=number(event, "sigma_n"),
        delay_s=number(event, "delay_s"),
    )


def _drop(event: Mapping[str, Any]) -> Drop:
    time_s = number(event, "onset_s")
    time_s = number(event, "time_s") if time_s is None else time_s
    return Drop(
        name=str(event["event"]),
        time_s=math.nan if time_s is None else time_s,
        load_n=number(event, "load_n"),
        drop_n=number(event, "drop_n"),
    )
