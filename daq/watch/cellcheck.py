"""The check of the cell after an overload: it is locked until its zero and one weight have been seen to be right.

A lock forbids bars and ways towards the specimen, not the way back. The zero moves for good where a
cell was bent: more than 0.1 % of its capacity off the commissioned zero is a case for verification, not for us.
"""

from __future__ import annotations

from math import isfinite, sqrt

from daq.errors import Refused
from daq.watch.core import Core
from daq.watch.requests import CheckCell
from daq.watch.states import ARMED

LOCKED = "the cell was overloaded: check its zero and one weight (midspan check --cell-weight)"
SHIFT_SHARE_MAX = 0.001  # of capacity; common practice, no source
WEIGHT_SHARE_MAX, WEIGHT_SIGMA = (
    0.005,
    3.0,
)  # of the weight, or three standard errors; common practice, no source
WEIGHT_SHARE_MIN = 0.01  # of capacity: less would not show a sensitivity that is off by half a percent
LOOK_S, BINS_MIN = 1.0, 4
STEADY_SIGMA = 6.0


def check(core: Core, request: CheckCell) -> None:
    """weight_n 0: nothing hangs on the cell, its zero is looked at. Above: this weight hangs, and the zero was seen."""
    capacity_n = core.setup.capacity_n
    missing = ["the frame is moving"] if core.state in ARMED or core.moving else []
    if core.run is not None:
        missing.append("a run is open")
    if not 0 <= request.weight_n < capacity_n or 0 < request.weight_n < WEIGHT_SHARE_MIN * capacity_n:
        low_n = WEIGHT_SHARE_MIN * capacity_n
        missing.append(f"the weight must be 0 for the zero, or {low_n:g} to {capacity_n:g} N")
    if request.weight_n > 0 and core.check_zero_n is None:
        missing.append("the zero has not been looked at yet: take everything off the cell first")
    if missing:
        raise Refused("check cell", tuple(missing))
    seen_n, u_n = _steady(core)
    if request.weight_n > 0:
        _weigh(core, request, seen_n, u_n)
    else:
        _zero(core, request, seen_n)


def _steady(core: Core) -> tuple[float, float]:
    """Gross mean of the last second and its standard error; refused where the force does not stand."""
    bins = [x + core.tare_n for t, x in core.watch.level.history if t >= core.clock_s - LOOK_S]
    if len(bins) < BINS_MIN or not isfinite(core.gross_n):
        raise Refused("check cell", ("no force signal for a second yet",))
    mean_n = sum(bins) / len(bins)
    half = len(bins) // 2
    drift_n = abs(sum(bins[half:]) / (len(bins) - half) - sum(bins[:half]) / half)
    u_n = max(core.sigma_n, core.setup.force.step) / sqrt(len(bins))
    if not drift_n <= max(STEADY_SIGMA * u_n, 0.0005 * core.setup.capacity_n):
        raise Refused(
            "check cell", (f"the force is not steady: it moves by {drift_n:.3g} N in half a second",)
        )
    return mean_n, u_n


def _zero(core: Core, request: CheckCell, seen_n: float) -> None:
    shift_n = seen_n - core.setup.frame.cell.zero_balance_n
    limit_n = SHIFT_SHARE_MAX * core.setup.capacity_n
    if not abs(shift_n) <= limit_n:
        core.check_zero_n = None
        why = f"the zero is off by {shift_n:.3g} N, at most {limit_n:g} N: have the cell verified"
        raise Refused("check cell", (why,))
    core.check_zero_n = seen_n
    core.emit("cell_zero_seen", who=request.who, shift_n=shift_n)


def _weigh(core: Core, request: CheckCell, seen_n: float, u_n: float) -> None:
    assert core.check_zero_n is not None
    found_n = seen_n - core.check_zero_n
    limit_n = max(WEIGHT_SHARE_MAX * request.weight_n, WEIGHT_SIGMA * u_n)
    if not abs(found_n - request.weight_n) <= limit_n:
        why = f"{request.weight_n:g} N show as {found_n:.4g} N, at most {limit_n:.2g} N off: have the cell verified"
        raise Refused("check cell", (why,))
    core.check_zero_n, core.cell_locked_s, core.overloaded = None, None, False
    core.emit("cell_checked", who=request.who, weight_n=request.weight_n, found_n=found_n)
