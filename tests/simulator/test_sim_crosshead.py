"""The crosshead moves as kinematics say, stops when and where it must, and does not care how time is cut."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from simulator.crosshead import Crosshead, Halt, Run
from simulator.law import Law


def crosshead(acceleration: float | None = None) -> Crosshead:
    return Crosshead(acceleration_mm_s2=acceleration, end_up_mm=-10.0, end_down_mm=10.0)


def run(head: Crosshead, until_s: float) -> float:
    """Pass time; the moment of the last change."""
    last_s = 0.0
    while head.next_change_s() <= until_s:
        last_s = head.next_change_s()
        head.change(last_s)
    return last_s


def test_run_on_is_speed_times_latency():
    head = crosshead()
    head.order(1.0, Run(0.5 / 60))
    run(head, 2.0)
    head.order(2.0 + 0.15, Halt())
    run(head, 5.0)
    assert head.position_at(5.0) == pytest.approx(0.5 / 60 * 1.15, abs=1e-12)
    assert not head.moving


def test_ramps_take_v_over_a():
    head = crosshead(acceleration=2.0)
    head.order(0.0, Run(1.0))
    run(head, 0.25)
    assert head.speed_at(0.25) == pytest.approx(0.5)
    head.order(1.0, Halt())
    assert run(head, 9.0) == pytest.approx(1.5)
    assert head.position_at(9.0) == pytest.approx(0.25 + 0.5 + 0.25)


@pytest.mark.parametrize("acceleration", [None, 0.5, 20.0])
@pytest.mark.parametrize(("speed", "goal"), [(1.0, 2.0), (-1.0, -3.0), (1.0, 0.01), (0.2, 1.0)])
def test_a_goal_is_met_exactly(acceleration, speed, goal):
    head = crosshead(acceleration)
    head.order(0.5, Run(speed, goal))
    run(head, 60.0)
    assert head.position_at(60.0) == goal
    assert not head.moving


@pytest.mark.parametrize("acceleration", [None, 3.0])
def test_end_switches_stop_it_and_let_it_go_back(acceleration):
    head = crosshead(acceleration)
    head.order(0.0, Run(4.0))
    run(head, 20.0)
    assert head.position_at(20.0) == pytest.approx(10.0, abs=1e-9)
    assert head.at_end(20.0) == (False, True)
    head.order(21.0, Run(4.0))
    run(head, 25.0)
    assert not head.moving
    head.order(25.0, Run(-4.0))
    run(head, 60.0)
    assert head.position_at(60.0) == pytest.approx(-10.0, abs=1e-9)
    assert head.at_end(60.0) == (True, False)


def test_a_halt_drops_runs_that_have_not_begun():
    head = crosshead()
    head.order(5.0, Run(1.0))
    head.order(4.0, Halt())
    run(head, 10.0)
    assert head.position_at(10.0) == 0.0


def test_force_loop_keeps_its_rate_through_the_toe():
    """Positions follow the law's inverse, so the force rises by the rate exactly."""
    law = Law(5000.0, 1.0, toe_mm=0.02)
    head = crosshead()
    head.order(0.0, Run(1.0))
    run(head, 1.0)
    head.follow(1.0, 0.0, 50.0, law)
    times = np.linspace(1.0, 3.0, 9)
    assert law.force(head.positions(times)) == pytest.approx(50.0 * (times - 1.0), abs=1e-9)
    head.order(3.0, Halt())
    run(head, 4.0)
    assert law.force_at(head.position_at(4.0)) == pytest.approx(100.0)


ORDERS = st.lists(
    st.tuples(
        st.floats(0.0, 1.0),
        st.one_of(
            st.builds(Run, st.floats(-3, 3)),
            st.builds(Run, st.floats(0.1, 3), st.floats(-9, 9)),
            st.builds(Halt, st.booleans()),
        ),
    ),
    max_size=6,
)


@settings(deadline=None, max_examples=60)
@given(orders=ORDERS, acceleration=st.sampled_from([None, 0.7, 15.0]))
def test_positions_are_continuous_and_within_the_switches(orders, acceleration):
    """No jump is larger than the highest speed allows, whatever is ordered."""
    head = crosshead(acceleration)
    now_s, seen = 0.0, []
    for wait_s, order in orders:
        head.order(now_s, order)
        for _ in range(20):
            now_s += max(wait_s, 0.01) / 20
            run(head, now_s)
            seen.append((now_s, head.position_at(now_s)))
    for (before_s, before), (after_s, after) in itertools.pairwise(seen):
        assert abs(after - before) <= 3.0 * (after_s - before_s) * (1 + 1e-9) + 2e-6
    assert all(-10 - 1e-6 <= position <= 10 + 1e-6 for _, position in seen)


@pytest.mark.parametrize("soft", [0.0, 0.15])
def test_a_law_and_its_inverse_agree(soft):
    law = Law(4000.0, 2.0, toe_mm=0.01, full_n=800.0, soft_share=soft, soft_from=0.6)
    positions = np.linspace(2.0005, 2.2, 50)
    assert law.position(law.force(positions)) == pytest.approx(positions, abs=1e-12)
    step = 1e-7
    slopes = [(law.force_at(x + step) - law.force_at(x - step)) / (2 * step) for x in positions]
    assert [law.slope_at(x) for x in positions] == pytest.approx(slopes, rel=1e-5)
    assert law.force_at(1.9) == 0.0


def test_softening_takes_its_share_of_the_slope_at_the_highest_load():
    law = Law(1000.0, 0.0, full_n=800.0, soft_share=0.15, soft_from=0.6)
    assert law.slope_at(0.4) == pytest.approx(1000.0)
    assert law.slope_at(0.8) == pytest.approx(850.0)
    assert math.isclose(law.force_at(0.8), 800 - 0.15 * 800 * 0.4 / 2)
