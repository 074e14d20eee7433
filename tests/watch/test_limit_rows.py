"""Every row of the table of limits: one run that passes it, and one just inside that does not."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import pytest

from daq.watch.limits import ROWS
from daq.watch.requests import Jog, ReturnCrosshead, StartRun
from daq.watch.values import Move, State, Stop
from tests.watch.frames import FORCE_STEP_N, frame, method
from tests.watch.rig import Machine, Rig


def under_load(load_n: float = 100.0, **changes: object) -> Rig:
    card = frame(motion__gap_mm=0.02, **changes)  # type: ignore[arg-type]
    rig = Rig(card, Machine(gap_mm=0.01, strength_n=1e9))
    return rig.loading(load_n=load_n)


def shifted(rig: Rig, to_n: float, samples: int) -> Rig:
    """The force jumps to that gross value for so many samples, then is back."""
    rig.samples_per_block = 1
    left = [samples]

    def jump(now_s: float, force: float) -> float:
        del now_s
        left[0] -= 1
        return to_n if left[0] >= 0 else force

    rig.noise_n, rig.disturb = 0.0, jump
    return rig.run_for(0.12)


@dataclass
class Row:
    row: int
    passes: Callable[[], Rig]
    stays: Callable[[], Rig]


def touch(gap_mm: float, seconds: float, **changes: object) -> Rig:
    rig = Rig(frame(motion__gap_mm=0.1, **changes), Machine(gap_mm=gap_mm))  # type: ignore[arg-type]
    rig.samples_per_block = 20
    return rig.started().run_for(seconds)


def wrong_sign(latent_n: float) -> Rig:
    rig = Rig(frame(motion__gap_mm=0.02), Machine(gap_mm=0.01)).ready()
    return shifted(rig, latent_n, 2)


def speed_times(factor: float, strength_n: float = 460.0) -> Rig:
    """The drive takes the number for another unit."""
    rig = Rig(frame(motion__gap_mm=0.02), Machine(gap_mm=0.01, strength_n=strength_n))
    rig.samples_per_block = 1
    rig.started().run_until(lambda: rig.pipe.state in (State.SEATING, State.LOADING))
    rig.machine.speed_mm_s *= factor
    return rig.run_for(2.5)


def flat(factor: float) -> Rig:
    """The bar gives way: from here on the force rises with that share of the stiffness."""
    rig = under_load()
    base_mm, force_n = rig.machine.at_mm, 100.0

    def soft(now_s: float, force: float) -> float:
        del now_s, force
        return force_n + factor * 3370.0 * (rig.machine.at_mm - base_mm)

    rig.disturb = soft
    return rig.run_for(3.0)


def ceiling(travel_mm: float, limit_mm: float) -> Rig:
    rig = Rig(frame(motion__gap_mm=0.02), Machine(gap_mm=0.01, strength_n=1e9))
    rig.loading(method(limits__travel_mm_max=limit_mm, rate__speed_mm_min=2.0), load_n=50.0)
    contact = rig.pipe._core.run.contact_mm  # type: ignore[union-attr]
    return rig.run_until(lambda: rig.machine.at_mm - contact > travel_mm, 10.0)


def jog_towards(distance_mm: float, travel_mm_max: float) -> Rig:
    rig = Rig(frame(motion__travel_mm_max=travel_mm_max), Machine(gap_mm=50.0)).run_for(0.2)
    rig.ask(Jog(distance_mm, 6.0))
    return rig.run_for(14.0)


def slow_drive(share: float) -> Rig:
    rig = under_load()
    rig.machine.speed_mm_s *= share
    return rig.run_for(2.5)


def way_back(back_mm: float) -> Rig:
    rig = under_load(200.0)
    start = rig.machine.at_mm
    rig.machine.speed_mm_s = -0.05
    rig.run_until(lambda: start - rig.machine.at_mm >= back_mm, 2.0)
    rig.machine.speed_mm_s = 0.0
    return rig.run_for(0.02)


def counts_become(value: Callable[[float, float], float], seconds: float = 0.3) -> Rig:
    rig = under_load()
    rig.count_of = value
    return rig.run_for(seconds)


def positions_become(value: Callable[[float, float], float], seconds: float, **limits: object) -> Rig:
    rig = Rig(frame(motion__gap_mm=0.02), Machine(gap_mm=0.01, strength_n=1e9))
    rig.loading(method(**limits), load_n=100.0)
    rig.position_of = value
    return rig.run_for(seconds)


def deaf(seconds: float) -> Rig:
    """The machine takes the stop and goes on for that long."""
    rig = under_load()
    rig.machine.latency_s = seconds
    rig.inputs()
    rig.take(rig.pipe.fault("ring_full", "", rig.now_s))
    return rig.run_for(1.0)


def run_on(speed_mm_s: float) -> Rig:
    rig = under_load()
    rig.machine.deaf = True
    rig.fault("ring_full")
    rig.machine.speed_mm_s = speed_mm_s
    return rig.run_for(0.6)


def shield(open_it: bool) -> Rig:
    rig = Rig(frame(motion__gap_mm=0.02, inputs=("shield_open",)), Machine(gap_mm=0.01, strength_n=1e9))
    rig.inputs(shield_open=False)
    rig.loading()
    rig.inputs(shield_open=open_it)
    return rig.run_for(0.1)


def lasting(seconds: float, allowed_s: float) -> Rig:
    rig = Rig(frame(motion__gap_mm=0.02), Machine(gap_mm=0.01, strength_n=1e9))
    rig.started(method(limits__run_s_max=allowed_s))
    return rig.run_for(seconds)


def above_specimen(to_n: float) -> Rig:
    return shifted(under_load(), to_n, 2)


P999_N = 563.4
HARD = {"fixtures__0__rating_n": 400.0}
WEAK = {"expected__strength_mpa": 150.0}


def fixture_at(to_n: float) -> Rig:
    card = frame(motion__gap_mm=0.02, fixtures__0__rating_n=400.0)
    rig = Rig(card, Machine(gap_mm=0.01, strength_n=1e9)).loading(method(expected__strength_mpa=280.0), 60.0)
    return shifted(rig, to_n, 2)


def method_at(to_n: float) -> Rig:
    rig = Rig(frame(motion__gap_mm=0.02), Machine(gap_mm=0.01, strength_n=1e9))
    return shifted(rig.loading(method(limits__force_n_max=300.0), 60.0), to_n, 2)


def strong(to_n: float, samples: int) -> Rig:
    """A run whose specimen ceiling lies above the cell's working range."""
    rig = Rig(frame(motion__gap_mm=0.02), Machine(gap_mm=0.01, strength_n=1e9))
    rig.loading(method(expected__strength_mpa=700.0, rate__speed_mm_min=1.0), 60.0)
    return shifted(rig, to_n, samples)


ROWS_TRIED = [
    Row(0, lambda: method_at(301.0), lambda: method_at(299.0)),
    Row(1, lambda: strong(901.0, 2), lambda: strong(899.0, 2)),
    Row(2, lambda: strong(1000.5, 1), lambda: strong(999.0, 1)),
    Row(3, lambda: fixture_at(361.0), lambda: fixture_at(359.0)),
    Row(4, lambda: above_specimen(1.1 * P999_N + 1.0), lambda: above_specimen(1.1 * P999_N - 1.0)),
    Row(5, lambda: wrong_sign(-20.5), lambda: wrong_sign(-19.5)),
    Row(8, lambda: speed_times(60.0), lambda: speed_times(2.0)),
    Row(9, lambda: touch(1.5, 14.0), lambda: touch(0.9, 14.0)),
    Row(10, lambda: flat(0.02), lambda: flat(0.2)),
    Row(11, lambda: ceiling(0.11, 0.1), lambda: ceiling(0.095, 0.1)),
    Row(12, lambda: run_on(0.5), lambda: deaf(0.2)),
    Row(13, lambda: jog_towards(1.2, 3.0), lambda: jog_towards(0.9, 3.0)),
    Row(14, lambda: way_back(0.02), lambda: way_back(0.002)),
    Row(15, lambda: counts_become(lambda t, c: math.nan), lambda: counts_become(lambda t, c: c)),
    Row(
        16,
        lambda: positions_become(lambda t, x: math.nan, 0.2),
        lambda: positions_become(lambda t, x: x, 0.2),
    ),
    Row(25, lambda: shield(True), lambda: shield(False)),
    Row(26, lambda: run_on(0.5 / 60.0), lambda: deaf(0.2)),
    Row(33, lambda: lasting(2.5, 2.0), lambda: lasting(1.5, 2.0)),
]


@pytest.mark.slow
@pytest.mark.parametrize("tried", ROWS_TRIED, ids=lambda tried: f"row-{tried.row}")
def test_the_row_is_passed(tried: Row) -> None:
    rig = tried.passes()
    assert tried.row in rig.rows(), [(e.name, dict(e.fields)) for e in rig.events][-6:]
    told = next(fields for fields in rig.named("limit") if fields["row"] == tried.row)
    assert told["do_now"] == ROWS[tried.row].do_now
    assert any(isinstance(action, Stop) for _, action in rig.actions)
    assert rig.pipe.state not in (State.LOADING, State.SEATING, State.APPROACHING)


@pytest.mark.slow
@pytest.mark.parametrize("tried", ROWS_TRIED, ids=lambda tried: f"row-{tried.row}")
def test_just_inside_it_is_not(tried: Row) -> None:
    rig = tried.stays()
    assert tried.row not in rig.rows(), [(e.name, dict(e.fields)) for e in rig.events][-6:]


def test_every_row_has_words() -> None:
    for row, words in ROWS.items():
        assert words.what and words.do_now, row


# --- the form of the limits


def test_one_sample_outside_is_counted_not_obeyed() -> None:
    rig = shifted(under_load(), 700.0, 1)
    assert rig.pipe.state is State.LOADING
    assert len(rig.named("limit_outlier")) == 1
    assert len(rig.named("glitch")) == 1


def test_a_rail_stops_at_the_first_sample_and_is_a_lost_signal() -> None:
    rig = under_load()
    rig.samples_per_block = 1
    rig.count_of = lambda t, c: 120_000.0
    rig.run_for(0.001)
    assert rig.pipe.state is State.SIGNAL_LOST
    assert not rig.named("fracture")


def test_a_rail_reached_from_near_the_top_is_an_overload() -> None:
    rig = Rig(frame(motion__gap_mm=0.02, channels__0__counts_max=60_000.0, channels__0__counts_min=-60_000.0))
    rig.machine = Machine(gap_mm=0.01, strength_n=1e9)
    rig.loading(method(expected__strength_mpa=700.0, rate__speed_mm_min=1.0), 60.0)
    rig.noise_n = 0.0
    rig.count_of = lambda t, c: (850.0 if c < 50_000 else 0.0) / FORCE_STEP_N
    rig.run_for(0.002)
    rig.count_of = lambda t, c: 60_000.0
    rig.run_for(0.002)
    assert rig.pipe.state in (State.OVERLOAD, State.STOPPED)


def test_limits_are_judged_on_gross_and_no_tare_moves_them() -> None:
    """30 N tared away with a reason: the ceiling of the cell comes at the same gross force."""
    ends = []
    for load in (0.0, 30.0):
        rig = Rig(frame(motion__gap_mm=0.02), Machine(gap_mm=0.01, strength_n=1e9))
        rig.disturb = lambda t, f, load=load: f + load  # type: ignore[misc]
        rig.ready(method(expected__strength_mpa=700.0), override="weight left on for the test")
        snapshot = rig.pipe.snapshot()
        ends.append(snapshot["force_n_max"])
        assert abs(float(snapshot["tare_n"]) - load) < 0.1  # type: ignore[arg-type]
    assert ends[0] == ends[1] == 900.0


def test_the_way_to_the_bar_is_slowed_where_it_could_crush_the_cell() -> None:
    """Row 7, acceptance scenario 10: 1 kN, 20 kN/mm, 150 ms, 3 N touch: at most 9.95 mm/min."""
    card = frame(motion__approach_mm_min=50.0, motion__blocked_stiffness_n_mm=20_000.0)
    rig = Rig(card).ready()
    rig.ask(StartRun())
    move = rig.actions[-1][1]
    assert isinstance(move, Move)
    assert 9.0 < move.speed_mm_min <= 9.95
    assert rig.one("speed_clamped")["asked_mm_min"] == 50.0
    slow = Rig(frame(motion__approach_mm_min=5.0)).ready()
    slow.ask(StartRun())
    assert not slow.named("speed_clamped")


@pytest.mark.slow
@pytest.mark.parametrize(("factor", "stops"), [(4.0, True), (2.5, False)])
@pytest.mark.parametrize("rate_hz", [20.0, 1000.0])
def test_a_modest_runaway_is_seen_in_the_slope(rate_hz: float, factor: float, stops: bool) -> None:
    rig = Rig(frame(rate_hz=rate_hz, motion__gap_mm=0.02), Machine(gap_mm=0.01, strength_n=1e9))
    rig.samples_per_block = 1
    rig.started().run_until(lambda: rig.pipe.state is State.LOADING)
    rig.machine.speed_mm_s *= factor
    rig.run_for(1.5)
    assert (8 in rig.rows()) is stops


@pytest.mark.slow
def test_a_run_that_stands_in_contact_for_five_minutes_is_told() -> None:
    """Row 30."""
    rig = Rig(frame(rate_hz=50.0, motion__gap_mm=0.02), Machine(gap_mm=0.01, strength_n=1e9))
    rig.started(method(preload__hold_s=400.0, limits__run_s_max=600.0))
    rig.run_until(lambda: rig.pipe.state is State.HOLDING, 20.0)
    rig.run_for(290.0)
    assert 30 not in rig.rows()
    rig.run_for(20.0)
    assert rig.rows() == [30]
    assert len(rig.named("operator_absent")) == 1


def test_a_return_stops_at_the_other_soft_end() -> None:
    rig = Rig(frame(motion__travel_mm_min=-3.0), Machine(gap_mm=50.0)).run_for(0.2)
    rig.ask(ReturnCrosshead(5.0, 20.0))
    rig.run_for(5.0)
    assert rig.rows() == [13]
    assert rig.machine.at_mm > -2.0
