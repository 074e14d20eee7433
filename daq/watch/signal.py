"""The signal: silence, gaps, frozen values, rails, a position that cannot be believed. Silence is a reading.

A lost signal is never a fracture: the stop is sent, nothing is driven back, and the word is *signal lost*. At
rest, with no run open and nothing moving, a loss is told and heals by itself once the data are back.
"""

from __future__ import annotations

from math import isfinite

from daq.stream.block import GAP_UNKNOWN, Block
from daq.watch.core import UNKNOWN_SAMPLES, Core
from daq.watch.limits import CAUTION_SHARE, Reaction, Trip
from daq.watch.repeats import Repeats
from daq.watch.states import Cause
from daq.watch.values import Severity, State

GAP_SAMPLES_MAX = 5
FROZEN_S = 0.05
BACK_S = 0.5
UNKNOWN_S = 0.5
NAN = float("nan")


class Silence:
    """When each link was last heard, and what its silence means."""

    __slots__ = ("_back_since_s", "_heard_s", "_lost")

    def __init__(self, sources: int) -> None:
        self._heard_s: list[float | None] = [None] * sources
        self._lost: set[int] = set()
        self._back_since_s: float | None = None

    def hear(self, core: Core, block: Block, now_s: float) -> None:
        """A block has come. A sample stamped later than now does not make a link alive for longer."""
        last_s, heard_s = min(float(block.time_s[-1]), now_s), self._heard_s[block.source]
        self._heard_s[block.source] = last_s if heard_s is None else max(heard_s, last_s)
        if block.gap_samples != 0 and heard_s is not None:
            _gap(core, block, float(block.time_s[0]) - heard_s)

    def judge(self, core: Core, now_s: float) -> bool:
        """Every link that was ever heard must be heard again in time. Whether one fell silent, or is heard again."""
        before = len(self._lost)
        for place, source in enumerate(core.setup.sources):
            heard_s = self._heard_s[place]
            if heard_s is None:
                continue
            if now_s - heard_s <= source.silence_s:
                self._lost.discard(place)
            elif place not in self._lost:
                self._lost.add(place)
                core.clock_s = max(core.clock_s, now_s)
                _silent(core, place, now_s - heard_s)
        if core.lost_at_rest:
            self._back(core, now_s)
        return len(self._lost) != before

    def _back(self, core: Core, now_s: float) -> None:
        if core.state is not State.SIGNAL_LOST:  # a person was quicker
            self._back_since_s, core.lost_at_rest = None, False
            return
        if self._lost or not isfinite(core.gross_n) or core.stopping is not None:
            self._back_since_s = None
            return
        if self._back_since_s is None:
            self._back_since_s = now_s
        if now_s - self._back_since_s >= BACK_S:
            self._back_since_s, core.lost_at_rest = None, False
            core.go(Cause.SIGNAL_BACK)
            core.emit("signal_back")


def _silent(core: Core, place: int, silent_s: float) -> None:
    why = f"no data for {silent_s:.3g} s"
    position = core.setup.position
    if place == core.setup.force.source:
        lost(core, why)
        core.gross_n = NAN
    if position is not None and position.source == place:
        position_lost(core, why)
    elif place != core.setup.force.source:
        core.emit("channel_lost", Severity.CAUTION, why=why, channel=core.setup.sources[place].name)


def _gap(core: Core, block: Block, span_s: float) -> None:
    source = core.setup.sources[block.source]
    core.clock_s = max(core.clock_s, float(block.time_s[0]))
    known = block.gap_samples != GAP_UNKNOWN
    missing = block.gap_samples if known else round(span_s * source.rate_hz) - 1
    core.emit("gap", source=source.name, missing=missing if known else None, span_s=span_s)
    if missing > GAP_SAMPLES_MAX and block.source == core.setup.force.source and (core.armed or core.moving):
        lost(core, f"{missing} samples are missing")


def lost(core: Core, why: str) -> None:
    """The force cannot be believed any more."""
    if core.state in (State.SIGNAL_LOST, State.UNKNOWN):
        return
    last = core.gross_n if isfinite(core.gross_n) else None
    severity = Severity.STOP
    if core.run is None and not core.moving and core.stopping is None:
        core.lost_at_rest = core.state is State.AT_REST
        core.go(Cause.SIGNAL_LOST, why)
        severity = Severity.CAUTION
    else:
        core.trip(Trip(15, last if last is not None else NAN, NAN, "N", Reaction.SIGNAL_LOST, why))
    core.emit("signal_lost", severity, why=why, channel=core.setup.force.name, last_n=last)


def jumped_to_rail(core: Core, gross_n: float) -> bool:
    """A rail reached from the middle of the range is a broken wire; from near the top it is an overload."""
    low_n, high_n = core.setup.rails_n
    near_top = abs(core.gross_n) >= CAUTION_SHARE * core.setup.capacity_n
    return not low_n <= gross_n <= high_n and not near_top


def learn_still(core: Core, repeats: Repeats, now_s: float) -> None:
    """Before the first zero, at rest: what stands still here for half a second may do so on a way without contact."""
    long = repeats.same + 1 >= UNKNOWN_SAMPLES and now_s - repeats.since_s >= UNKNOWN_S
    if long and not core.lively and not core.armed and not core.moving:
        core.still_samples = None


def frozen(core: Core, same: int, since_s: float, now_s: float) -> None:
    """Identical raw values for longer than this signal shows by chance; before any zero, for half a second at least and
    only where count and quiet record, or what was seen at rest, say that it should have changed.
    """
    needed, lasting_s = core.frozen_samples, FROZEN_S
    if needed is None:
        needed, lasting_s = core.still_samples, UNKNOWN_S
        if needed is None:
            return
    if same + 1 < needed or now_s - since_s < lasting_s:
        return
    if core.armed or (core.moving and core.set_speed_mm_s > 0):
        lost(core, "the value stands still")


def others(core: Core, row: list[float]) -> None:
    """Channels that are not needed for control: their loss is told once, and the run goes on."""
    for column in core.setup.others:
        if column.source != core.setup.force.source:
            continue
        if isfinite(row[column.column]):
            core.others_lost.discard(column.name)
        elif column.name not in core.others_lost:
            core.others_lost.add(column.name)
            core.emit("channel_lost", Severity.CAUTION, why="it is not a number", channel=column.name)


def position_lost(core: Core, why: str) -> None:
    """Row 16: stop, unless the method allowed before the start to go on by force alone."""
    run = core.run
    if core.travel is None or core.travel.at_mm is None:
        return
    core.travel.forget()
    core.speed_watch = None
    allowed = run is not None and run.plan.method.limits.force_only_allowed
    if (core.armed or core.moving) and not (core.armed and allowed):
        what = "position signal lost: " + why
        core.trip(Trip(16, NAN, NAN, "mm", Reaction.SIGNAL_LOST, what))
        return
    core.emit("displacement_lost", Severity.CAUTION, why=why)
