"""Summary, size, break map and trend against definitions and scipy."""

import math
import statistics

import numpy as np
import pytest

from daq.mechanics.sections import Circle, Rectangle, Spans
from daq.mechanics.stress import moment_share
from daq.series.breakmap import break_map, two_sided_binomial
from daq.series.growth import fit_crack_growth
from daq.series.size import effective_surface_mm2, effective_volume_mm3
from daq.series.summary import summary_of
from daq.series.trend import student_two_sided, trend_of

stats = pytest.importorskip("scipy.stats")


def test_summary_agrees_with_the_standard_library():
    values = [401.0, 380.5, 399.0, 420.25]
    found = summary_of(values)
    assert (found.mean_mpa, found.spread_mpa, found.median_mpa) == (
        pytest.approx(statistics.fmean(values)),
        pytest.approx(statistics.stdev(values)),
        statistics.median(values),
    )
    assert (found.min_mpa, found.max_mpa, found.n) == (380.5, 420.25, 4)
    assert found.u_mean_mpa == pytest.approx(found.spread_mpa / 2.0)
    assert (
        summary_of([]) is None
        and summary_of([1.0]).spread_mpa is None
        and summary_of([1.0]).variation is None
    )


@pytest.mark.parametrize("spans", [Spans(40.0), Spans(40.0, 20.0), Spans(60.0, 20.0)])
@pytest.mark.parametrize("modulus", [5.0, 12.3])
def test_effective_sizes_agree_with_quadrature(spans: Spans, modulus: float):
    """Midpoint rule of (stress/highest)^m over the tension half of a bar and of a rod."""
    x = (np.arange(20_000) + 0.5) / 20_000 * spans.support_mm - spans.support_mm / 2.0
    length = np.mean(moment_share(x, spans) ** modulus) * spans.support_mm
    y = (np.arange(20_000) + 0.5) / 20_000
    bar, rod = Rectangle(4.0, 3.0), Circle(5.0)
    assert effective_volume_mm3(bar, spans, modulus) == pytest.approx(
        length * 6.0 * np.mean(y**modulus), rel=1e-5
    )
    sides = 2.0 * 1.5 * np.mean(y**modulus)
    assert effective_surface_mm2(bar, spans, modulus) == pytest.approx(length * (4.0 + sides), rel=1e-5)
    disc = np.mean(2.0 * np.sqrt(1.0 - y**2) * y**modulus) * 2.5**2
    assert effective_volume_mm3(rod, spans, modulus) == pytest.approx(length * disc, rel=1e-4)
    angle = y * math.pi
    rim = np.mean(np.clip(np.sin(angle), 0.0, None) ** modulus) * math.pi * 2.5
    assert effective_surface_mm2(rod, spans, modulus) == pytest.approx(length * rim, rel=1e-4)


def test_break_map_counts_and_cautions():
    """Acceptance scenario 12: 24 of 30 break left: caution with p = 0.0014."""
    positions = [-3.0] * 23 + [-14.0] + [2.0] * 6
    found = break_map(positions, Spans(40.0, 20.0), roller_diameter_mm=4.5)
    assert (found.left, found.right, found.outside_load_span, found.near_roller) == (24, 6, 1, 1)
    assert found.p_one_sided == pytest.approx(0.0014, abs=5e-5) and found.caution
    assert found.near_roller_share == pytest.approx(1 / 30)
    few = break_map([-1.0] * 9, Spans(40.0, 20.0), 4.5)
    assert few.p_one_sided < 0.01 and not few.caution
    assert break_map([0.0], Spans(40.0), 4.5).p_one_sided == 1.0


@pytest.mark.parametrize(("more", "n"), [(5, 10), (8, 10), (24, 30), (16, 31), (0, 0)])
def test_binomial_agrees_with_scipy(more: int, n: int):
    exact = stats.binomtest(more, n, 0.5).pvalue if n else 1.0
    assert two_sided_binomial(more, n) == pytest.approx(exact, rel=1e-12)


@pytest.mark.parametrize("seed", range(5))
def test_trend_agrees_with_scipy(seed: int):
    rng = np.random.default_rng(seed)
    strengths = np.round(400.0 + 30.0 * rng.standard_normal(30), -1)  # with ties
    order = np.arange(30)
    found, exact = trend_of(strengths, order), stats.spearmanr(strengths, order)
    assert found.rho == pytest.approx(exact.statistic, rel=1e-12)
    assert found.p == pytest.approx(exact.pvalue, rel=1e-9)


@pytest.mark.parametrize("degrees", [1, 2, 3, 4, 7, 28, 101])
@pytest.mark.parametrize("t", [0.0, 0.3, 2.0, 9.0])
def test_student_agrees_with_scipy(degrees: int, t: float):
    assert student_two_sided(t, degrees) == pytest.approx(2.0 * stats.t.sf(t, degrees), rel=1e-9, abs=1e-13)


def test_trend_threshold_of_the_job_map():
    """|rho| > 0.48 at n = 30, p about 0.007."""
    order = list(range(30))
    rng = np.random.default_rng(1)
    falling = [400.0 - 1.2 * i + 12.0 * rng.standard_normal() for i in order]
    found = trend_of(falling, order)
    assert found.caution is (abs(found.rho) > 0.478)
    t = 0.48 * math.sqrt(28 / (1 - 0.48**2))
    assert student_two_sided(t, 28) == pytest.approx(0.007, abs=3e-4)
    assert trend_of(order, order).rho == 1.0 and trend_of(order, order).p == 0.0


def test_nothing_to_correlate_is_an_answer():
    assert trend_of([1.0, 2.0, 3.0, 4.0], [1, 2, 3, 4]) is None
    assert trend_of([5.0] * 6, range(6)) is None


def test_one_rate_tells_no_crack_growth():
    assert fit_crack_growth([1.0, 1.0, 1.0], [300.0, 310.0, 320.0]) is None
    assert fit_crack_growth([1.0, 10.0], [300.0, 310.0]) is None
