"""Weibull fits and bounds against libraries that were written by others, and against what must hold
by definition.
"""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.series.factors import pivotal_bounds, unbiased_modulus, unbiasing_factor
from daq.series.flaws import fit_populations
from daq.series.goodness import A2_POINTS, goodness_of
from daq.series.profile import profile_bounds
from daq.series.ranks import Direction, Ranks, line_fit, plotting_positions, suspended_positions
from daq.series.weibull import fit_weibull, log_likelihood

stats = pytest.importorskip("scipy.stats")


def bars(seed: int, n: int, modulus: float = 12.0) -> np.ndarray:
    return 400.0 * np.random.default_rng(seed).weibull(modulus, n)


@pytest.mark.parametrize("seed", range(4))
def test_complete_sample_agrees_with_scipy(seed: int):
    """scipy needs floc=0, or it fits three parameters; it is good to about 1e-5 only."""
    strengths = bars(seed, 30, modulus=5.0 + 5.0 * seed)
    fit = fit_weibull(strengths)
    modulus, _, scale = stats.weibull_min.fit(strengths, floc=0)
    assert fit.modulus == pytest.approx(modulus, rel=1e-4)
    assert fit.scale_mpa == pytest.approx(scale, rel=1e-5)
    assert fit.log_likelihood >= np.sum(stats.weibull_min.logpdf(strengths, modulus, scale=scale)) - 1e-9


@pytest.mark.slow
@pytest.mark.parametrize("seed", range(3))
def test_suspended_sample_agrees_with_lifelines(seed: int):
    lifelines = pytest.importorskip("lifelines")
    strengths = bars(seed, 25)
    broke = np.random.default_rng(100 + seed).random(25) < 0.6
    fit = fit_weibull(strengths[broke], strengths[~broke])
    other = lifelines.WeibullFitter().fit(strengths / 400.0, broke)
    assert fit.modulus == pytest.approx(other.rho_, rel=1e-4)
    assert fit.scale_mpa == pytest.approx(400.0 * other.lambda_, rel=1e-5)
    assert (fit.failed, fit.suspended) == (int(broke.sum()), int((~broke).sum()))


@pytest.mark.slow
def test_suspended_sample_agrees_with_surpyval():
    surpyval = pytest.importorskip("surpyval")
    strengths = bars(7, 40)
    broke = np.random.default_rng(8).random(40) < 0.7
    fit = fit_weibull(strengths[broke], strengths[~broke])
    scale, modulus = surpyval.Weibull.fit(x=strengths, c=(~broke).astype(int)).params
    assert (fit.modulus, fit.scale_mpa) == (pytest.approx(modulus, rel=1e-4), pytest.approx(scale, rel=1e-5))


@pytest.mark.slow
@settings(max_examples=80, deadline=None)
@given(
    st.lists(st.floats(1e-3, 1e6), min_size=2, max_size=40),
    st.lists(st.floats(1e-3, 1e6), max_size=10),
    st.floats(1e-3, 1e3),
)
def test_fit_is_a_top_of_the_likelihood_and_follows_the_unit(failed, suspended, factor):
    fit = fit_weibull(failed, suspended)
    if fit is None:
        assert len(failed) < 2 or max(suspended, default=0.0) <= max(failed) * (1 + 1e-9)
        return
    whole = np.array([*failed, *suspended])
    for dm, ds in ((1.001, 1.0), (0.999, 1.0), (1.0, 1.001), (1.0, 0.999)):
        other = log_likelihood(fit.modulus * dm, fit.scale_mpa * ds, np.array(failed), whole)
        assert other <= fit.log_likelihood + 1e-6 * abs(fit.log_likelihood)
    scaled = fit_weibull([factor * x for x in failed], [factor * x for x in suspended])
    assert scaled is None or scaled.modulus == pytest.approx(fit.modulus, rel=1e-6)


@pytest.mark.parametrize(
    ("failed", "suspended"),
    [
        ([], []),
        ([400.0], []),
        ([400.0, 400.0], []),
        ([400.0, 400.0], [300.0]),
        ([400.0, -1.0], []),
        ([400.0, math.nan], []),
    ],
)
def test_nothing_to_fit_is_an_answer(failed, suspended):
    assert fit_weibull(failed, suspended) is None
    assert profile_bounds(failed, suspended) is None


def test_equal_breaks_below_a_survivor_can_be_fitted():
    fit = fit_weibull([300.0, 300.0, 300.0], [400.0])
    assert 1.0 < fit.modulus < 20.0 and fit.scale_mpa > 300.0


def test_quantile_and_probability_are_inverse():
    fit = fit_weibull(bars(1, 20))
    assert fit.probability(fit.quantile_mpa(0.01)) == pytest.approx(0.01, rel=1e-12)
    assert fit.mean_mpa == pytest.approx(stats.weibull_min.mean(fit.modulus, scale=fit.scale_mpa), rel=1e-12)


def test_bounds_need_bars_and_no_survivors():
    few, suspended = fit_weibull(bars(2, 4)), fit_weibull(bars(2, 10), [390.0])
    for fit in (few, suspended):
        assert pivotal_bounds(fit) is None and unbiased_modulus(fit) is None
    assert unbiasing_factor(4) is None
    assert unbiasing_factor(10_000) == pytest.approx(1.0, abs=2e-4)


def test_bounds_are_wider_at_a_higher_level():
    fit = fit_weibull(bars(3, 30))
    inner, middle, outer = (pivotal_bounds(fit, level) for level in (0.80, 0.90, 0.95))
    assert outer.modulus.low < middle.modulus.low < inner.modulus.low < fit.modulus
    assert fit.scale_mpa < inner.scale_mpa.high < middle.scale_mpa.high < outer.scale_mpa.high


@pytest.mark.slow
def test_profile_bounds_lie_where_the_likelihood_has_dropped():
    """By definition, with the inner maximum found by scipy."""
    optimize = pytest.importorskip("scipy.optimize")
    strengths, suspended = bars(4, 20), np.array([380.0, 390.0, 405.0])
    fit, bounds = fit_weibull(strengths, suspended), profile_bounds(strengths, suspended, 0.90)
    whole = np.concatenate((strengths, suspended))
    drop = stats.chi2.ppf(0.90, 1) / 2.0
    for modulus in (bounds.modulus.low, bounds.modulus.high):
        best = optimize.minimize_scalar(
            lambda s, m=modulus: -log_likelihood(m, s, strengths, whole),
            bounds=(300.0, 600.0),
            method="bounded",
        )
        assert fit.log_likelihood + best.fun == pytest.approx(drop, rel=1e-4)
    for scale in (bounds.scale_mpa.low, bounds.scale_mpa.high):
        best = optimize.minimize_scalar(
            lambda m, s=scale: -log_likelihood(m, s, strengths, whole), bounds=(1.0, 60.0), method="bounded"
        )
        assert fit.log_likelihood + best.fun == pytest.approx(drop, rel=1e-4)
    assert bounds.method == "profile likelihood"


@pytest.mark.slow
def test_profile_and_pivot_agree_for_many_bars():
    strengths = bars(5, 100)
    profile, pivot = profile_bounds(strengths, []), pivotal_bounds(fit_weibull(strengths))
    for name in ("modulus", "scale_mpa"):
        ours, theirs = getattr(profile, name), getattr(pivot, name)
        assert (ours.low, ours.high) == (
            pytest.approx(theirs.low, rel=0.02),
            pytest.approx(theirs.high, rel=0.02),
        )


def test_no_upper_bound_is_said_and_not_invented():
    bounds = profile_bounds([300.0, 300.0 + 1e-9], [])
    assert bounds is None or bounds.modulus.high is None or bounds.modulus.high > bounds.modulus.low


def test_goodness_agrees_with_scipy():
    strengths = bars(6, 30)
    fit = fit_weibull(strengths)
    d = stats.kstest(strengths, stats.weibull_min(fit.modulus, scale=fit.scale_mpa).cdf).statistic
    below = np.sort(stats.weibull_min(fit.modulus, scale=fit.scale_mpa).cdf(strengths))
    i = np.arange(1, 31)
    a2 = -30.0 - np.mean((2 * i - 1) * (np.log(below) + np.log1p(-below[::-1])))
    found = goodness_of(strengths, fit)
    assert (found.kolmogorov_d, found.anderson_a2) == (
        pytest.approx(d, rel=1e-10),
        pytest.approx(a2, rel=1e-8),
    )
    assert goodness_of(strengths, fit_weibull(strengths, [500.0])) is None


def test_two_lumps_are_doubted():
    rng = np.random.default_rng(9)
    lumps = np.concatenate((200.0 + rng.random(15), 500.0 + rng.random(15)))
    assert goodness_of(lumps, fit_weibull(lumps)).doubt == 0.01


@pytest.mark.slow
def test_percentage_points_by_simulation():
    """Stephens' points (from memory) against 2,000 samples of 25: shares within four standard errors."""
    rng = np.random.default_rng(10)
    values = []
    for _ in range(2000):
        sample = rng.weibull(1.0, 25)
        values.append(goodness_of(sample, fit_weibull(sample)).anderson_a2 * (1.0 + 0.2 / 5.0))
    for share, point in A2_POINTS:
        assert np.mean(np.array(values) > point) == pytest.approx(
            share, abs=4.0 * math.sqrt(share / 2000) + 0.003
        )


@pytest.mark.slow
def test_competing_flaws_keep_every_bar():
    """Acceptance scenario 12: A m 12, s0 420; B m 6, s0 520: medians over seeds near the truth, the
    pooled fit far off.
    """
    found = []
    for seed in range(40):
        rng = np.random.default_rng(seed)
        a, b = 420.0 * rng.weibull(12.0, 30), 520.0 * rng.weibull(6.0, 30)
        codes = ["pore" if x < y else "edge" for x, y in zip(a, b, strict=True)]
        populations = fit_populations(list(np.minimum(a, b)), codes)
        assert populations.separated and all(fit.n == 30 for fit in populations.fits.values() if fit)
        pooled = fit_weibull(np.minimum(a, b))
        found.append(
            (
                populations.fits["pore"].modulus,
                populations.fits["pore"].scale_mpa,
                pooled.modulus,
                pooled.scale_mpa,
            )
        )
    medians = np.median(found, axis=0)
    assert medians == pytest.approx([12.5, 420.0, 10.3, 408.0], rel=0.05)


def test_uncoded_bars_mean_one_population_and_a_note():
    strengths = list(bars(11, 6))
    one = fit_populations(strengths, ["pore", "edge", "?", "pore", "edge", "pore"])
    assert not one.separated and one.uncoded == 1 and one.fits["all"].n == 6
    assert list(fit_populations(strengths, ["pore"] * 6).fits) == ["pore"]


def test_rank_increments_are_plain_ranks_without_survivors():
    strengths = list(bars(12, 9))
    for ranks in Ranks:
        ordered, places = suspended_positions(strengths, [True] * 9, ranks)
        assert ordered == pytest.approx(np.sort(strengths)) and places == pytest.approx(
            plotting_positions(9, ranks)
        )


def test_rank_increments_by_hand():
    """Four bars, the second suspended: ranks 1, then 1 + (5 - 1)/(1 + 2) = 2.3333, then 3.6667."""
    ordered, places = suspended_positions([100.0, 110.0, 120.0, 130.0], [True, False, True, True], Ranks.MEAN)
    assert ordered.tolist() == [100.0, 120.0, 130.0]
    assert places == pytest.approx(np.array([1.0, 1.0 + 4.0 / 3.0, 1.0 + 8.0 / 3.0]) / 5.0)


def test_line_fit_agrees_with_numpy():
    strengths = bars(13, 20)
    y = np.log(-np.log1p(-plotting_positions(20, Ranks.MEDIAN)))
    x = np.log(np.sort(strengths))
    assert line_fit(strengths, Ranks.MEDIAN).modulus == pytest.approx(np.polyfit(x, y, 1)[0], rel=1e-10)
    across = line_fit(strengths, Ranks.MEDIAN, Direction.X_ON_Y)
    assert across.modulus == pytest.approx(1.0 / np.polyfit(y, x, 1)[0], rel=1e-10)
    assert line_fit([400.0, 400.0]) is None
