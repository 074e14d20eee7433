"""The position channel: from counts to the way towards the specimen, its bands, and its loss."""

from __future__ import annotations

from math import isfinite

import numpy as np

from daq.stream.block import Block, Floats
from daq.watch import signal, stages
from daq.watch.core import Core
from daq.watch.states import BROKEN, LATCHED

RUN_ON_ROW = 12


def sample(core: Core, time_s: float, count: float) -> None:
    """One position sample."""
    travel, column = core.travel, core.setup.position
    assert travel is not None and column is not None
    at_mm = core.setup.towards * column.value(count)
    if not isfinite(at_mm):
        signal.position_lost(core, "it is not a number")
        return
    travel.feed(time_s, at_mm)
    bands = core.bands
    if bands.low_mm <= at_mm <= bands.high_mm:
        if bands.outside:
            bands.inside()
        return
    trip = bands.judge(at_mm)
    if trip is None:
        return
    if trip.row == RUN_ON_ROW:
        if RUN_ON_ROW not in core.tripped_rows:  # said once; the stop goes on being repeated
            core.tripped_rows.add(RUN_ON_ROW)
            stages.stop_failed(core, "the crosshead comes near the lower anvil", RUN_ON_ROW)
    elif core.state not in LATCHED and core.state not in BROKEN:
        core.trip(trip)


def other_block(core: Core, block: Block) -> None:
    """A block of a link that does not carry the force."""
    column = core.setup.position
    if column is None or column.source != block.source:
        return
    for time_s, count in zip(block.time_s.tolist(), block.counts[:, column.column].tolist(), strict=True):
        core.clock_s = max(core.clock_s, time_s)
        sample(core, time_s, count)


def scaled(core: Core, counts: Floats) -> Floats:
    """The same arithmetic as `sample`, for a whole column."""
    column = core.setup.position
    assert column is not None
    return core.setup.towards * (column.sign * (counts * column.scale + column.offset))


def quiet(core: Core, at_mm: Floats) -> bool:
    """True if no sample of this stretch is outside its bands, or no number."""
    bands = core.bands
    inside = bands.low_mm <= float(at_mm.min()) and float(at_mm.max()) <= bands.high_mm
    return inside and not bands.outside and bool(np.isfinite(at_mm).all())


def take(core: Core, times_s: Floats, at_mm: Floats) -> None:
    """Go past a stretch that `quiet` has proven."""
    assert core.travel is not None
    core.travel.feed_many(times_s, at_mm)
