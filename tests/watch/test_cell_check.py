"""After an overload the cell is locked until its zero and a weight were right."""

from __future__ import annotations

import pytest

from daq.errors import Refused
from daq.watch.pipeline import Proven
from daq.watch.requests import CheckCell, Jog, OpenRun, Request, Reset, ReturnCrosshead
from daq.watch.values import State
from tests.watch.frames import frame, open_run
from tests.watch.rig import Machine, Rig


def overloaded(peak_n: float = 1001.0) -> Rig:
    """A 1 kN cell, one sample above its capacity; reset by a person who has looked."""
    rig = Rig(frame(), Machine(gap_mm=50.0)).run_for(0.5)
    rig.noise_n, rig.samples_per_block = 0.05, 1
    until_s = rig.now_s + 0.003
    climb = [850.0, peak_n, 0.0]
    rig.disturb = lambda t, force: climb[min(int((until_s - t) * -1000 + 2.5), 2)] if t <= until_s else force
    rig.run_for(0.5)
    if rig.pipe.state is not State.AT_REST:
        rig.ask(Reset("A. Tester", looked=True))
    return hung(rig, 0.0)


def hung(rig: Rig, weight_n: float) -> Rig:
    rig.samples_per_block = 5
    rig.disturb = lambda t, force: force + weight_n
    return rig.run_for(1.6)


def missing(rig: Rig, request: Request) -> str:
    try:
        rig.ask(request)
    except Refused as error:
        return "; ".join(error.missing)
    return ""


def test_an_overload_locks_bars_and_ways_towards_them_and_not_the_way_back() -> None:
    rig = overloaded()
    assert len(rig.named("cell_locked")) == 1
    for request in (open_run(), Jog(0.1, 1.0)):
        assert "the cell was overloaded" in missing(rig, request)
    assert missing(rig, ReturnCrosshead(0.1, 5.0)) == ""


def test_just_below_its_capacity_nothing_is_locked() -> None:
    rig = overloaded(999.0)
    assert not rig.named("cell_locked")
    assert missing(rig, open_run()) == ""


def test_zero_and_weight_lift_the_lock_in_this_order_only() -> None:
    rig = overloaded()
    assert "the zero has not been looked at" in missing(rig, CheckCell("A. Tester", 200.0))
    assert missing(rig, CheckCell("A. Tester", 0.0)) == ""
    hung(rig, 200.9)
    assert missing(rig, CheckCell("A. Tester", 200.0)) == ""
    told = rig.one("cell_checked")
    assert (told["who"], told["weight_n"]) == ("A. Tester", 200.0)
    assert float(told["found_n"]) == pytest.approx(200.9, abs=0.1)  # type: ignore[arg-type]
    hung(rig, 0.0)
    assert missing(rig, open_run()) == ""


@pytest.mark.parametrize(
    ("zero_n", "shown_n", "asked_n", "word"),
    [
        (1.2, None, 0.0, "the zero is off by 1.2 N, at most 1 N"),
        (0.8, None, 0.0, ""),
        (0.0, 201.2, 200.0, "200 N show as 201.2 N"),
        (0.0, 5.0, 5.0, "10 to 1000 N"),
    ],
)
def test_what_is_not_right_keeps_it_locked(
    zero_n: float, shown_n: float | None, asked_n: float, word: str
) -> None:
    """More than 0.1 % of the capacity at zero, or half a percent of the weight, is a case for verification."""
    rig = hung(overloaded(), zero_n)
    if shown_n is not None:
        assert missing(rig, CheckCell("A. Tester", 0.0)) == ""
        hung(rig, zero_n + shown_n)
    assert word in missing(rig, CheckCell("A. Tester", asked_n))
    assert "the cell was overloaded" in missing(hung(rig, 0.0), open_run())


def test_a_force_that_moves_is_not_weighed() -> None:
    rig = overloaded()
    rig.disturb = lambda t, force: force + 3.0 * (t % 7.0)
    rig.run_for(1.2)
    assert "not steady" in missing(rig, CheckCell("A. Tester", 0.0))


def test_a_lock_of_before_holds_after_a_restart() -> None:
    rig = Rig(frame(), Machine(gap_mm=50.0), proven=Proven(True, True, cell=False)).run_for(0.5)
    assert "the cell was overloaded" in missing(rig, open_run())
    assert isinstance(open_run(), OpenRun)
