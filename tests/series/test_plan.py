"""The planner against a worked example, beam theory by hand, drawn bars, and published Weibull factors."""

from __future__ import annotations

import math

import numpy as np
import pytest

from daq.cards.change import changed_method, measured_method
from daq.cards.library import find_method, read_library
from daq.cards.load import example_path, load_frame, load_method, load_series
from daq.errors import CardError
from daq.mechanics.sections import Rectangle, Spans
from daq.series.gates import Finding, Gate, findings, refusal
from daq.series.order import firing_order
from daq.series.plan import Bench, bench_of, lag_of, make_plan
from daq.series.suggest import bars_for, bars_row, ladder_up, last_sample_rate_hz, sample_rate_hz, suggest
from simulator.card import Flaws, Reference
from simulator.flaws import MomentShape, draw_weakest

ALUMINA = load_method(example_path("alumina-bars.toml"))
LANE_A = load_frame(example_path("kiln-lane-a.toml"))
SHIPPED = read_library().methods
FULL = Bench(
    stiffness_n_mm=10e3, stiffness_measured=True, capacity_n=1000.0, verified_n=(10.0, 1000.0), rating_n=2000.0,
    rate_hz=1000.0, time_constant_s=0.0, noise_n=0.15, speed_mm_min=(0.05, 60.0),
)  # fmt: skip


def by_name(found: tuple[Finding, ...], name: str) -> list[Finding]:
    return [one for one in found if one.name == name]


def worst(found: tuple[Finding, ...], name: str) -> Gate:
    gates = [one.gate for one in by_name(found, name)]
    return Gate.BLOCKED if Gate.BLOCKED in gates else gates[0]


def test_the_worked_example_of_the_job_map():
    """B2: 460 N (P0.1 270, P99.9 564 N), 23.6 MPa/s (rigid 36), 16.3 s, 90 um in the bar of 136 um, 31 mJ."""
    plan = make_plan(ALUMINA, *bench_of(LANE_A, "quarter-40-20"))
    mean = plan.mean
    assert mean.load_n == pytest.approx(460.0, abs=0.5)
    assert plan.at("P0.1").load_n == pytest.approx(270.0, abs=0.5)
    assert plan.at("P99.9").load_n == pytest.approx(564.0, abs=0.7)
    assert plan.stress_rate_mpa_s == pytest.approx(23.6, abs=0.1)
    assert plan.rigid_stress_rate_mpa_s == pytest.approx(36.0, abs=0.5)
    assert mean.time_s == pytest.approx(16.3, abs=0.05)
    assert (mean.bar_um, mean.travel_um) == (pytest.approx(90.0, abs=0.5), pytest.approx(136.0, abs=0.6))
    assert mean.energy_mj == pytest.approx(31.0, abs=0.3)
    assert plan.corrections.chamfer == pytest.approx(1.0069, abs=5e-5)
    assert plan.corrections.roller == pytest.approx(1.01019, abs=5e-6)
    assert all(one.gate is Gate.OPEN for one in findings(plan, 30))


def test_quantiles_are_those_of_drawn_bars():
    """2,000 bars drawn flaw by flaw by the simulator: the share below each planned load is its probability."""
    plan = make_plan(ALUMINA, FULL)
    section, spans = Rectangle(4.0, 3.0), Spans(40.0, 20.0)
    reference = Reference(support_span_mm=40.0, load_span_mm=20.0, width_mm=4.0, thickness_mm=3.0)
    flaws = Flaws(
        name="pores", where="surface", weibull_modulus=12.0, strength_mpa=plan.scale_mpa, reference=reference
    )
    rng, bars = np.random.default_rng(20261201), 2000
    shape = MomentShape(spans)
    drawn = [draw_weakest((flaws,), section, shape, rng) for _ in range(bars)]
    broken_mpa = np.array([one.nominal_mpa for one in drawn if one is not None])
    assert broken_mpa.size == bars
    for name in ("P1", "P50", "P99"):
        row = plan.at(name)
        assert row.probability is not None
        found = np.mean(broken_mpa < row.stress_mpa)
        assert abs(found - row.probability) < 4.0 * math.sqrt(row.probability * (1 - row.probability) / bars)
        assert plan.share_below(row.load_n) == pytest.approx(row.probability, rel=1e-12)
    assert np.mean(broken_mpa) == pytest.approx(plan.mean.stress_mpa, rel=4.0 * 0.1 / math.sqrt(bars))


def test_springs_in_series_and_a_rigid_frame():
    """300 GPa, 4 x 3 on 40/20: 4050 N/mm; on 10 kN/mm the rate is 0.71174 of the rigid one."""
    method = changed_method(ALUMINA, {"expected.modulus_gpa": 300.0})
    rigid, real = make_plan(method), make_plan(method, Bench(stiffness_n_mm=10e3))
    assert rigid.bar_n_mm == pytest.approx(4050.0, rel=1e-12)
    assert rigid.stress_rate_mpa_s == pytest.approx(rigid.rigid_stress_rate_mpa_s, rel=1e-12)
    assert rigid.machine_share == 0.0
    assert real.stress_rate_mpa_s / rigid.stress_rate_mpa_s == pytest.approx(0.71174, abs=5e-6)
    assert real.machine_share == pytest.approx(1.0 - 0.71174, abs=5e-6)
    assert real.mean.time_s == pytest.approx(real.mean.travel_um / 1e3 / (0.5 / 60.0), rel=1e-12)


@pytest.mark.parametrize(
    ("name", "load_n", "time_s"),
    [  # mean load by hand from the printed forms; time = strength or load over the set rate
        ("EN-12390-5", 4.5 * 150.0**3 / 450.0, 4.5 / 0.05),
        ("EN-196-1", 7.0 * 40.0**3 / 150.0, 7.0 * 40.0**3 / 150.0 / 50.0),
        (
            "C674-rod",
            60.0 * math.pi * 12.7**3 / (8.0 * 101.6),
            60.0 * math.pi * 12.7**3 / (8.0 * 101.6) / 8.0,
        ),
        ("EN-1288-3", 70.0 * 2.0 * 360.0 * 36.0 / (3.0 * 800.0), 35.0),
    ],
)
def test_force_and_stress_rates(name: str, load_n: float, time_s: float):
    plan = make_plan(find_method(name).card)
    assert plan.mean.load_n == pytest.approx(load_n, rel=1e-9)
    assert plan.mean.time_s == pytest.approx(time_s, rel=1e-9)


def test_the_pane_s_own_weight_stands_beside():
    """EN 1288-3: 3.065625 MPa for 6 mm on 1000 mm, 2500 kg/m3."""
    assert make_plan(find_method("EN-1288-3").card).corrections.own_weight_mpa == pytest.approx(
        3.065625, rel=1e-9
    )


@pytest.mark.parametrize("found", range(len(SHIPPED)), ids=[one.card.name for one in SHIPPED])
def test_every_shipped_method_can_be_planned(found: int):
    """The example material of each card breaks at its mean load in a time that its own run limit allows."""
    method = SHIPPED[found].card
    plan = make_plan(method, Bench(stiffness_n_mm=20e3))
    assert refusal(plan) is None
    assert plan.at("P99.9").time_s < method.limits.run_s_max
    assert plan.at("P0.1").load_n < plan.at("P50").load_n < plan.at("P99.9").load_n
    assert suggest(plan).cell_n * 0.8 >= plan.at("P99.9").load_n


GATES = [
    ("all open", {}, {}, None, None),
    ("cell too large", {}, {"capacity_n": 5e3, "verified_n": (400.0, 5e3)}, "capacity", Gate.BLOCKED),
    ("cell too small", {}, {"capacity_n": 700.0, "verified_n": (7.0, 700.0)}, "capacity", Gate.BLOCKED),
    ("fixture too weak", {}, {"rating_n": 600.0}, "capacity", Gate.BLOCKED),
    ("no cell", {}, {"capacity_n": None, "verified_n": None}, "capacity", Gate.UNKNOWN),
    ("10 samples a second", {}, {"rate_hz": 10.0}, "sampling", Gate.CAUTION),
    ("1 sample a second", {}, {"rate_hz": 1.0}, "sampling", Gate.BLOCKED),
    ("slow amplifier", {}, {"time_constant_s": 0.1}, "sampling", Gate.BLOCKED),
    ("lag not known", {}, {"time_constant_s": None}, "sampling", Gate.CAUTION),
    ("no sample rate", {}, {"rate_hz": None}, "sampling", Gate.UNKNOWN),
    ("noise", {}, {"noise_n": 5.0}, "detection", Gate.CAUTION),
    ("drive too fast", {}, {"speed_mm_min": (1.0, 60.0)}, "speed", Gate.BLOCKED),
    ("too fast a test", {"rate.speed_mm_min": 20.0}, {}, "time to break", Gate.BLOCKED),
    ("some bars too early", {"rate.speed_mm_min": 1.4}, {}, "time to break", Gate.CAUTION),
    ("scatter as wide as the band", {"expected.weibull_modulus": 1.5}, {}, "preload", Gate.BLOCKED),
    ("soft frame", {}, {"stiffness_n_mm": 3000.0}, "modulus", Gate.BLOCKED),
    ("frame not measured", {}, {"stiffness_measured": False}, "modulus", Gate.BLOCKED),
    ("slender", {"thickness_mm": 0.6}, {}, "shape", Gate.CAUTION),
    ("short", {"support_span_mm": 24.0}, {}, "shape", Gate.CAUTION),
]


@pytest.mark.parametrize(("name", "card", "bench", "gate", "stands"), GATES, ids=[row[0] for row in GATES])
def test_one_change_closes_one_gate(name, card, bench, gate, stands):
    plain = {field: getattr(FULL, field) for field in FULL.__slots__}
    found = findings(make_plan(changed_method(ALUMINA, card), Bench(**{**plain, **bench})), 30)
    shut = {one.name for one in found if one.gate is not Gate.OPEN}
    if gate is None:
        assert shut == set()
    else:
        assert worst(found, gate) is stands, found


def test_capacity_is_said_as_a_share_of_the_series():
    """Half of the bars lie below P50: verified from there on, half of the series is lost."""
    p50_n = make_plan(ALUMINA, FULL).at("P50").load_n
    plain = {field: getattr(FULL, field) for field in FULL.__slots__}
    bench = Bench(**{**plain, "verified_n": (p50_n, 1000.0)})
    (below, *_) = by_name(findings(make_plan(ALUMINA, bench)), "capacity")
    assert below.text.startswith("50.0 % of the bars below the lowest verified force of 465 N")


def test_a_block_is_refused_unless_a_standard_has_that_shape():
    """L/h 4 is no beam; a concrete beam of L/h 3 is a standard's and gets a caution."""
    block = make_plan(changed_method(ALUMINA, {"support_span_mm": 12.0}))
    assert refusal(block) is not None and "below 5" in str(refusal(block))
    concrete = make_plan(find_method("C78").card)
    assert refusal(concrete) is None
    assert worst(findings(concrete), "shape") is Gate.CAUTION


@pytest.mark.parametrize(
    ("changes", "told"),
    [
        (
            {"expected.modulus_gpa": 1200.0},
            "plan: expected.modulus_gpa = 1200.0: a number > 0.1 and <= 1000 GPa",
        ),
        ({"expected.strength_mpa": 30e3}, "at most 19000 MPa, a twentieth of modulus_gpa"),
        ({"expected.strength_mpa": -1.0}, "plan: expected.strength_mpa = -1.0: a number > 0 MPa"),
        ({"thickness_mm": 0.0}, "plan: thickness_mm = 0.0: a number > 0 mm"),
        ({"diameter_mm": 3.0}, "not used for section 'rectangle'"),
        ({"load_span_mm": 40.0}, "less than support_span_mm = 40 mm"),
        ({"expected.weibull_modulus": math.nan}, "write a finite number"),
    ],
)
def test_what_cannot_be_is_refused_with_the_reason(changes, told):
    with pytest.raises(CardError) as caught:
        changed_method(ALUMINA, changes)
    (line,) = caught.value.problems
    assert told in line


def test_a_changed_method_keeps_its_shape_and_loses_the_name_of_the_standard():
    shipped = find_method("C1161-B").card
    assert changed_method(shipped, {}) is shipped
    faster = changed_method(shipped, {"rate.speed_mm_min": 0.6})
    assert faster.standard == "ASTM C1161" and faster.rate.speed_mm_min == 0.6
    longer = changed_method(shipped, {"support_span_mm": 80.0})
    assert (longer.geometry, longer.load_span_mm, longer.standard) == ("4-point-quarter", 40.0, "")
    free = changed_method(shipped, {"load_span_mm": 10.0})
    assert (free.geometry, free.load_span_mm) == ("4-point", 10.0)
    three = changed_method(shipped, {"load_span_mm": 0.0, "rate.rate_mpa_s": 20.0})
    assert (three.geometry, three.rate.mode, three.preload.seating_mm_min) == ("3-point", "stress", 0.5)


def test_measured_bars_stand_in_for_nominal_ones():
    """Means of the bench sheet, by numpy; the method's rules and its standard stay."""
    loaded = load_series(example_path("alumina-series.toml"))
    found = measured_method(loaded.method, loaded.specimens)
    wide = np.mean([np.mean(bar.width_mm) for bar in loaded.specimens])
    thick = np.mean([np.mean(bar.thickness_mm) for bar in loaded.specimens])
    assert (found.width_mm, found.thickness_mm) == (
        pytest.approx(wide, abs=6e-4),
        pytest.approx(thick, abs=6e-4),
    )
    assert found.rate == loaded.method.rate and found.clauses == loaded.method.clauses
    rod = find_method("C1684-4pt").card
    bars = [bar.model_copy(update={"thickness_mm": (3.1, 3.2), "width_mm": ()}) for bar in loaded.specimens]
    assert measured_method(rod, bars).diameter_mm == pytest.approx(3.15)


def test_bench_from_a_frame_card():
    """Compliance table: 10 kN/mm. Without it the blocked stiffness stands in, and a modulus is not promised."""
    bench, spans = bench_of(LANE_A, "quarter-40-20")
    assert (bench.stiffness_n_mm, bench.stiffness_measured) == (pytest.approx(10e3, rel=1e-9), True)
    assert (spans.support_mm, spans.load_mm, bench.rate_hz) == (40.0, 20.0, 1000.0)
    other, _ = bench_of(LANE_A, "three-40")
    assert (other.stiffness_n_mm, other.stiffness_measured) == (20e3, False)
    assert "blocked stiffness" in other.stiffness_source


def test_lag_of_a_filter():
    """First-order filter: 0.15915/fc; a declared constant comes first."""
    assert lag_of(None, 2.0)[0] == pytest.approx(0.15915 / 2.0, rel=1e-4)
    assert lag_of(0.01, 2.0) == (0.01, "declared")
    assert lag_of(None, None) == (None, "not known")


def test_sample_rates():
    """q 0.1 %: 3 s -> 333.3 Hz; 400 MPa, 300 GPa at 9.375e-5/s: 14.22 s, 70.3 Hz."""
    assert last_sample_rate_hz(3.0, 1e-3) == pytest.approx(333.3, abs=0.05)
    time_s = 400.0 / (300e3 * 9.375e-5)
    assert time_s == pytest.approx(14.22, abs=0.005)
    assert last_sample_rate_hz(time_s, 1e-3) == pytest.approx(70.3, abs=0.05)
    rate = sample_rate_hz(16.3, 0.0)
    assert rate == 50.0 and 0.5 / rate / 16.3 < 1e-3
    assert sample_rate_hz(1.0, 0.0796) is None
    assert sample_rate_hz(300.0, 0.0) == 10.0


def test_the_suggested_rate_and_bandwidth_open_the_gate():
    """A slow amplifier is blocked; one of the suggested bandwidth, at the suggested rate, is not."""
    slow = make_plan(ALUMINA, Bench(rate_hz=1000.0, time_constant_s=0.2))
    advice = suggest(slow)
    assert advice.sample_rate_hz is None
    lag_s, source = lag_of(None, advice.bandwidth_hz)
    mended = make_plan(ALUMINA, Bench(rate_hz=1000.0, time_constant_s=lag_s, lag_source=source))
    rate_hz = suggest(mended).sample_rate_hz
    final = make_plan(ALUMINA, Bench(rate_hz=rate_hz, time_constant_s=lag_s, lag_source=source))
    assert worst(findings(final), "sampling") is Gate.OPEN


def test_the_suggested_speed_is_inside_every_window():
    """C1161-B at 20 mm/min: the middle of what time and strain rate allow opens both gates."""
    method = changed_method(find_method("C1161-B").card, {"rate.speed_mm_min": 20.0})
    advice = suggest(make_plan(method, FULL))
    assert advice.speed_mm_min is not None and advice.speed_window_mm_min is not None
    mended = changed_method(method, {"rate.speed_mm_min": advice.speed_mm_min})
    found = findings(make_plan(mended, FULL))
    assert worst(found, "time to break") is Gate.OPEN and worst(found, "strain rate") is Gate.OPEN
    weak = changed_method(find_method("C1161-B").card, {"expected.strength_mpa": 20.0})
    assert suggest(make_plan(weak, FULL)).speed_mm_min is None


@pytest.mark.parametrize(
    ("value", "step"),
    [(1.0, 1.0), (1.01, 2.0), (2.0, 2.0), (4.9, 5.0), (6.0, 10.0), (705.0, 1000.0), (0.03, 0.05)],
)
def test_the_ladder(value: float, step: float):
    assert ladder_up(value) == pytest.approx(step, rel=1e-12)


@pytest.mark.parametrize(
    ("bars", "low", "high"),
    [  # m_hat/m at 2.5 and 97.5 % of a simulated table (40,000 samples a row, error about 0.5 %)
        (5, 1 / 3.42, 1 / 0.619),
        (10, 1 / 2.04, 1 / 0.690),
        (15, 1 / 1.70, 1 / 0.726),
        (20, 1 / 1.56, 1 / 0.748),
        (30, 1 / 1.40, 1 / 0.786),
        (50, 1 / 1.29, 1 / 0.824),
        (100, 1 / 1.18, 1 / 0.868),
    ],
)
def test_what_bars_buy(bars: int, low: float, high: float):
    row = bars_row(bars)
    assert row is not None
    assert (row.low, row.high) == (pytest.approx(low, rel=0.016), pytest.approx(high, rel=0.01))


@pytest.mark.slow
def test_what_bars_buy_against_drawn_series():
    """Of 400 drawn series of 20 bars, the true modulus lies in the planned range in 95 % (binomial, 4 sigma)."""
    from scipy.optimize import brentq

    rng, row = np.random.default_rng(5), bars_row(20)
    assert row is not None

    def fitted(x: np.ndarray) -> float:
        log = np.log(x)
        return brentq(lambda m: np.sum(x**m * log) / np.sum(x**m) - 1.0 / m - log.mean(), 0.5, 200.0)

    inside = np.mean([row.low <= 10.0 / fitted(rng.weibull(10.0, 20)) <= row.high for _ in range(400)])
    assert abs(inside - 0.95) < 4.0 * math.sqrt(0.95 * 0.05 / 400)


def test_bars_for_a_width():
    bars = bars_for(0.6)
    assert bars is not None
    row, fewer = bars_row(bars), bars_row(bars - 1)
    assert row is not None and fewer is not None
    assert row.high - row.low <= 0.6 < fewer.high - fewer.low
    assert bars_for(0.01) is None
    advice = suggest(make_plan(ALUMINA))
    assert dict(advice.widths)[0.6] == bars
    assert advice.raw_rate_hz == pytest.approx(1e3 / make_plan(ALUMINA).mean.time_s, rel=1e-12)


# --- firing order ---

SIXTY = [(f"A{n:02d}", "a") for n in range(40)] + [(f"B{n:02d}", "b") for n in range(20)]


def test_the_order_holds_every_bar_once_and_comes_again_with_its_seed():
    turns = firing_order(SIXTY, 7)
    assert sorted(turn.number for turn in turns) == sorted(number for number, _ in SIXTY)
    assert [turn.place for turn in turns] == list(range(1, 61))
    assert turns == firing_order(list(reversed(SIXTY)), 7)
    assert turns != firing_order(SIXTY, 8)


def test_the_order_of_a_seed_never_changes():
    """A stored seed must give the same order in every version."""
    turns = firing_order([(str(n), "") for n in range(1, 9)], 2026)
    assert " ".join(turn.number for turn in turns) == "7 4 3 8 6 5 1 2"


def test_batches_are_spread_over_the_sitting():
    """Each third of the sitting holds its share of each batch, to one bar."""
    for seed in range(50):
        turns = firing_order(SIXTY, seed)
        for start in (0, 20, 40):
            from_b = sum(turn.batch == "b" for turn in turns[start : start + 20])
            assert abs(from_b - 20 / 3) <= 2.0


def test_places_are_random():
    """Over 600 seeds each bar of ten comes first equally often (chi-square, 9 degrees, 99.9 %: 27.9)."""
    bars = [(str(n), "") for n in range(10)]
    first = [int(firing_order(bars, seed)[0].number) for seed in range(600)]
    counts = np.bincount(first, minlength=10)
    assert np.sum((counts - 60.0) ** 2 / 60.0) < 27.9


def test_a_number_twice_is_refused():
    with pytest.raises(ValueError, match="bars twice: A1"):
        firing_order([("A1", ""), ("A2", ""), ("A1", "")], 1)
