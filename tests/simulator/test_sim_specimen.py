"""Bars are as stiff and as stressed as beam theory says, and the same number is always the same bar."""

from __future__ import annotations

import numpy as np
import pytest

from daq.cards.frame import Fixture
from daq.cards.series import Specimen
from daq.errors import CardError
from simulator.card import Contact, SimulatorCard
from simulator.grip import Grip
from simulator.law import Law, in_series
from simulator.specimen import Bar, InHand, make_bar

QUARTER = Fixture(name="q", geometry="4-point", support_span_mm=40.0, load_span_mm=20.0, rating_n=1e4)
THREE = Fixture(name="t", geometry="3-point", support_span_mm=40.0, rating_n=1e4)


def bar_of(card: SimulatorCard, fixture: Fixture, contact: Contact | None = None, **hand) -> Bar:
    return make_bar(InHand(number="B-1", **hand), card.bar, contact or Contact(), fixture, card.seed)


@pytest.mark.parametrize(("fixture", "bending"), [(THREE, 2025.0), (QUARTER, 4050.0)])
def test_stiffness_is_the_tabulated_one_less_shear(make_card, fixture, bending):
    """E 300, 4 x 3 x 40, exact rationals; shear share 2.4 (1+nu)(h/L)^2 for both."""
    bar = bar_of(make_card(), fixture)
    shear = 2.4 * 1.25 * (3 / 40) ** 2
    assert bar.stiffness_n_mm == pytest.approx(bending / (1 + shear), rel=1e-12)


@pytest.mark.parametrize(("fixture", "ratio"), [(THREE, 0.83160), (QUARTER, 0.71174)])
def test_a_soft_frame_lowers_the_slope_by_the_tabulated_ratio(make_card, fixture, ratio):
    """10 kN/mm frame, shear taken off by a very slender bar's formula."""
    bar = bar_of(make_card(), fixture)
    bending = bar.stiffness_n_mm * (1 + 2.4 * 1.25 * (3 / 40) ** 2)
    assert in_series(10_000.0, bending) / bending == pytest.approx(ratio, abs=5e-6)


@pytest.mark.parametrize(("fixture", "stress"), [(THREE, 166.6666667), (QUARTER, 83.3333333)])
def test_stress_per_newton(make_card, fixture, stress):
    """F 100 N on 4 x 3, exact rationals; a 0.12 mm chamfer adds 0.6871 %."""
    assert 100 * bar_of(make_card(), fixture).stress_per_n == pytest.approx(stress, rel=1e-9)
    chamfered = bar_of(make_card(), fixture, chamfer_mm=0.12)
    assert 100 * chamfered.stress_per_n == pytest.approx(stress * 1.006871, rel=1e-6)


def test_fixed_rollers_carry_a_share_of_the_moment(make_card):
    """mu h/a: 9 % at 0.3 on 40/20 (first principles): the bar breaks at a higher force."""
    free = bar_of(make_card(), QUARTER, strength_mpa=400.0)
    fixed = bar_of(make_card(), QUARTER, Contact(friction=0.3), strength_mpa=400.0)
    assert free.break_n / fixed.break_n == pytest.approx(0.91, rel=1e-12)


def test_the_middle_goes_down_further_than_the_load_rollers(make_card):
    """Quarter-point: 1.375 times, bending only; shear adds the same to both."""
    bar = bar_of(make_card(), QUARTER)
    shear = 2.4 * 1.25 * (3 / 40) ** 2
    assert bar.mid_per_n * bar.stiffness_n_mm == pytest.approx((1.375 + shear) / (1 + shear), rel=1e-9)


def test_the_same_number_is_the_same_bar(make_card):
    population = {
        "name": "pores",
        "weibull_modulus": 12.0,
        "strength_mpa": 400.0,
        "reference": {"support_span_mm": 40.0, "width_mm": 4.0, "thickness_mm": 3.0},
    }
    card = make_card(bar={"flaws": [population], "scatter_mm": 0.02})
    first = make_bar(InHand(number="A-1"), card.bar, card.contact, QUARTER, 7)
    other = make_bar(InHand(number="A-2"), card.bar, card.contact, QUARTER, 7)
    again = make_bar(InHand(number="A-1"), card.bar, card.contact, QUARTER, 7)
    sized = make_bar(InHand(number="A-1", thickness_mm=3.0), card.bar, card.contact, QUARTER, 7)
    assert again == first
    assert other.weakest != first.weakest
    assert sized.weakest is not None and first.weakest is not None
    assert sized.weakest.nominal_mpa == pytest.approx(first.weakest.nominal_mpa, rel=1e-3)


def test_a_row_of_a_bench_sheet_can_be_mounted(make_card):
    readings = InHand.model_validate_json('{"number": "A-1", "width_mm": [4.0, 4.02], "thickness_mm": [3.0]}')
    bar = make_bar(readings, make_card().bar, Contact(), QUARTER, 1)
    assert bar.section.area_mm2 == pytest.approx(4.01 * 3.0)


def test_trends_and_given_strengths(make_card):
    card = make_card()
    bar = bar_of(card, QUARTER, strength_mpa=400.0, strength_factor=0.92, break_at_mm=15.0)
    assert bar.break_n * bar.stress_per_n == pytest.approx(368.0)
    assert bar.weakest is not None and bar.weakest.x_mm == 15.0
    assert bar.weakest.strength_mpa == pytest.approx(184.0)


@pytest.mark.parametrize(
    ("change", "names"),
    [
        ({"width_mm": None}, "width_mm"),
        ({"section": "tube", "width_mm": None, "flaws": [{"where": "volume"}]}, "bar"),
        ({"modulus_gpa": 5000.0}, "bar.modulus_gpa"),
        ({"colour": "white"}, "bar.colour"),
    ],
)
def test_bad_cards_are_refused_with_the_key(make_card, change, names):
    with pytest.raises(CardError, match=names):
        make_card(bar=change)


# --- how it lets go -------------------------------------------------------------------------------------


def grip(make_card, **after) -> Grip:
    card = make_card(after_break=after, drive={"stiffness_n_mm": 10_000.0})
    bar = bar_of(card, QUARTER, strength_mpa=400.0)
    held = Grip(card, bar, 1.0, 11.0)
    assert held.law is not None
    held.part(10.0, held.break_n)
    return held


def test_after_a_sudden_break_the_load_train_rings_down_to_minus_the_force(make_card):
    held = grip(make_card, ring_hz=250.0, ring_damping=0.03)
    times = 10 + np.linspace(0, 0.2, 20_001)
    force = held.force(times, np.full(times.size, 1.2))
    assert force[0] == pytest.approx(held.break_n)
    assert force.min() == pytest.approx(-held.break_n * np.exp(-0.03 * np.pi), rel=2e-3)
    crossings = times[1:][np.diff(np.signbit(force)) != 0][:20]
    assert np.diff(crossings).mean() == pytest.approx(1 / 500, rel=1e-3)
    assert held.force(np.array([10.5]), np.array([1.2]))[0] == 0.0


def test_halves_may_stay_wedged_for_a_while(make_card):
    held = grip(make_card, ring_hz=0.0, residual_percent=30.0, residual_s=0.4)
    force = held.force(np.array([10.1, 10.39, 10.41]), np.full(3, 1.2))
    assert force == pytest.approx([0.3 * held.break_n, 0.3 * held.break_n, 0.0])


def test_a_gradual_failure_decays(make_card):
    held = grip(make_card, kind="gradual", fall_s=0.08)
    force = held.force(np.array([10.0, 10.08, 10.16]), np.full(3, 1.2))
    assert force == pytest.approx(held.break_n * np.exp([0.0, -1.0, -2.0]))


def test_pieces_carry_no_more_than_the_crosshead_presses(make_card):
    held = grip(make_card, ring_hz=0.0, residual_percent=50.0, residual_s=9.0)
    assert held.force(np.array([11.0]), np.array([1.001]))[0] < 10.0
    assert held.force(np.array([11.0]), np.array([0.9]))[0] == 0.0


def test_a_crosshead_that_goes_on_meets_the_anvil(make_card):
    held = grip(make_card, ring_hz=0.0)
    assert held.force(np.array([20.0]), np.array([11.1]))[0] == pytest.approx(1000.0)


def test_a_softening_bar_breaks_at_its_strength(make_card):
    card = make_card(after_break={"kind": "gradual", "softening_percent": 15.0})
    bar = bar_of(card, QUARTER, strength_mpa=400.0)
    law = Grip(card, bar, 1.0, 11.0).law
    assert law is not None
    at_break = law.position_at(bar.break_n)
    assert law.force_at(at_break) == pytest.approx(bar.break_n)
    straight = Law(law.stiffness_n_mm, law.origin_mm)
    assert law.slope_at(at_break) / straight.slope_at(at_break) == pytest.approx(0.85, rel=1e-6)


def test_hands_take_every_key_of_a_bench_sheet():
    assert set(Specimen.model_fields) <= set(InHand.model_fields)


def test_every_fault_of_a_card_is_told_in_one_line(make_card):
    """File, key, value, what is allowed, what to do; misfortunes by their own kind."""
    bad = {
        "bar": {"modulus_gpa": "380"},
        "drive": {"stifness_n_mm": 1.0},
        "faults": [{"kind": "glich"}, {"kind": "slip"}],
    }
    with pytest.raises(CardError) as raised:
        make_card(**bad)
    lines = raised.value.problems
    assert len(lines) == 4
    assert any("bar.modulus_gpa = '380'" in line and "GPa" in line for line in lines)
    assert any("drive.stifness_n_mm" in line and "did you mean stiffness_n_mm?" in line for line in lines)
    assert any("faults[#1].kind = 'glich'" in line and "glitch" in line for line in lines)
    assert any("faults[#2].percent" in line and "%" in line for line in lines)
