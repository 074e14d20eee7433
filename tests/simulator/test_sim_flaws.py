"""Strength, size effect and break position come out of one drawing as the closed forms say. Oracle: scipy."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import integrate, stats

from daq.mechanics.sections import Circle, Rectangle, Spans, Tube
from simulator.card import Flaws, Reference
from simulator.flaws import MomentShape, draw_weakest, effective_size

RECTANGLE = Rectangle(4.0, 3.0)
QUARTER, THREE = Spans(40.0, 20.0), Spans(40.0)


def flaws(m: float, where: str = "surface", spans: Spans = QUARTER, strength_mpa: float = 400.0) -> Flaws:
    reference = Reference(
        support_span_mm=spans.support_mm, load_span_mm=spans.load_mm, width_mm=4.0, thickness_mm=3.0
    )
    return Flaws(name="pores", where=where, weibull_modulus=m, strength_mpa=strength_mpa, reference=reference)


def broken(populations, section, shape, bars, seed):
    rng = np.random.default_rng(seed)
    weakest = [draw_weakest(populations, section, shape, rng) for _ in range(bars)]
    return np.array([w.nominal_mpa for w in weakest]), np.array([w.x_mm for w in weakest])


@pytest.mark.parametrize(
    ("spans", "m", "volume", "surface"),
    [
        (THREE, 5, 6.666667, 30.000000),
        (THREE, 20, 0.544218, 7.891156),
        (QUARTER, 10, 11.900826, 93.223140),
        (Spans(40.0, 40 / 3), 20, 4.172336, 60.498866),
    ],
)
def test_effective_sizes_are_the_tabulated_ones(spans, m, volume, surface):
    """Closed forms worked out by others of the project; our volume counts the tensile half only, exactly as theirs."""
    assert effective_size("volume", RECTANGLE, spans, m) == pytest.approx(volume, rel=1e-6)
    assert effective_size("surface", RECTANGLE, spans, m) == pytest.approx(surface, rel=1e-6)


def test_effective_sizes_of_a_rod_are_integrals():
    """Quadrature over the tensile half of a rod, three-point."""
    m, d = 10.0, 5.0
    along = integrate.quad(lambda x: (1 - 2 * abs(x) / 40) ** m, -20, 20)[0]
    around = integrate.quad(lambda angle: math.cos(angle) ** m * d / 2, -math.pi / 2, math.pi / 2)[0]
    inside = integrate.quad(lambda y: (2 * y / d) ** m * 2 * math.sqrt(d**2 / 4 - y**2), 0, d / 2)[0]
    assert effective_size("surface", Circle(d), THREE, m) == pytest.approx(along * around, rel=1e-6)
    assert effective_size("volume", Circle(d), THREE, m) == pytest.approx(along * inside, rel=1e-6)
    assert effective_size("surface", Tube(d, 3.0), THREE, m) == pytest.approx(along * around, rel=1e-6)


@pytest.mark.slow
@pytest.mark.parametrize("where", ["face", "surface", "edges", "volume"])
def test_maximum_likelihood_gives_back_the_card(where):
    """4000 bars: the standard errors of m and of the scale are about 1.2 % and 0.17 % at m = 10."""
    strengths, _ = broken((flaws(10.0, where),), RECTANGLE, MomentShape(QUARTER), 4000, 11)
    m, _, scale = stats.weibull_min.fit(strengths, floc=0)
    assert m == pytest.approx(10.0, rel=0.05)
    assert scale == pytest.approx(400.0, rel=0.007)
    assert stats.kstest(strengths, stats.weibull_min(10.0, scale=400.0).cdf).pvalue > 1e-3


@pytest.mark.slow
@pytest.mark.parametrize("m", [8.0, 12.0])
def test_three_point_bars_are_stronger_by_the_closed_form(m):
    """((m+2)/2)^(1/m) for surface flaws: 1.22 and 1.18; the mean of 4000 has 0.2 % of error or less."""
    four, _ = broken((flaws(m),), RECTANGLE, MomentShape(QUARTER), 4000, 21)
    three, _ = broken((flaws(m),), RECTANGLE, MomentShape(THREE), 4000, 22)
    assert three.mean() / four.mean() == pytest.approx(((m + 2) / 2) ** (1 / m), rel=0.01)


@pytest.mark.slow
def test_larger_bars_are_weaker():
    """Twice the surface: weaker by 2^(1/m)."""
    m = 6.0
    small, _ = broken((flaws(m, "face"),), RECTANGLE, MomentShape(QUARTER), 4000, 31)
    wide, _ = broken((flaws(m, "face"),), Rectangle(8.0, 3.0), MomentShape(QUARTER), 4000, 32)
    assert small.mean() / wide.mean() == pytest.approx(2 ** (1 / m), rel=0.015)


@pytest.mark.slow
def test_three_point_bars_break_near_the_middle_as_the_moment_says():
    """Density (1 - 2|x|/L)^m."""
    m = 10.0
    _, x_mm = broken((flaws(m),), RECTANGLE, MomentShape(THREE), 3000, 41)
    assert stats.kstest(np.abs(x_mm), lambda x: 1 - (1 - x / 20) ** (m + 1)).pvalue > 1e-3
    assert abs(np.mean(x_mm > 0) - 0.5) < 4 * 0.5 / math.sqrt(3000)


@pytest.mark.slow
def test_four_point_bars_break_between_the_load_rollers_as_often_as_they_should():
    """Share (m+1) Li/(L + m Li), uniform there."""
    m = 10.0
    _, x_mm = broken((flaws(m),), RECTANGLE, MomentShape(QUARTER), 3000, 51)
    inside = np.abs(x_mm) <= 10
    share = (m + 1) * 20 / (40 + m * 20)
    assert inside.mean() == pytest.approx(share, abs=4 * math.sqrt(share * (1 - share) / 3000))
    assert stats.kstest(x_mm[inside], stats.uniform(-10, 20).cdf).pvalue > 1e-3


@pytest.mark.slow
def test_load_rollers_off_the_middle_break_one_side():
    """Share of breaks right of the load rollers' middle, by quadrature of the moment's power."""
    m, shape = 12.0, MomentShape(QUARTER, load_offset_mm=1.0)
    left = integrate.quad(lambda x: shape.share(x) ** m, -20, 1.0, points=[-9.0])[0]
    right = integrate.quad(lambda x: shape.share(x) ** m, 1.0, 20, points=[11.0])[0]
    _, x_mm = broken((flaws(m, "face"),), RECTANGLE, shape, 3000, 61)
    expected = right / (left + right)
    assert expected < 0.4
    assert np.mean(x_mm > 1.0) == pytest.approx(expected, abs=4 * 0.5 / math.sqrt(3000))


def test_moment_with_rollers_off_the_middle_is_statics():
    """L 40, Li 20, e 1: reactions 0.475 F and 0.525 F; moments 11 R and 9 R against F a/2 = 5 F."""
    shape = MomentShape(QUARTER, load_offset_mm=1.0)
    assert [share for _, share in shape.corners] == pytest.approx([0, 0.475 * 11 / 5, 0.525 * 9 / 5, 0])
    assert MomentShape(THREE, 1.0).share(1.0) == pytest.approx(1 - 4 / 1600)


@pytest.mark.slow
def test_two_populations_compete():
    """Weakest link: the survival probabilities multiply."""
    populations = (flaws(12.0, strength_mpa=420.0), flaws(6.0, "edges", strength_mpa=520.0))
    strengths, _ = broken(populations, RECTANGLE, MomentShape(QUARTER), 3000, 71)
    pores, chips = stats.weibull_min(12, scale=420), stats.weibull_min(6, scale=520)
    assert stats.kstest(strengths, lambda s: 1 - pores.sf(s) * chips.sf(s)).pvalue > 1e-3


def test_a_bar_without_flaws_never_breaks():
    assert draw_weakest((), RECTANGLE, MomentShape(THREE), np.random.default_rng(1)) is None
