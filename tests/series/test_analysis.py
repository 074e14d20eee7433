"""The analysis of a whole series: every estimate with its method, mixed series set apart, no bar dropped."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from daq.cards.library import find_method
from daq.mechanics.sections import Rectangle, Spans
from daq.results.rules import Counting
from daq.series.analysis import Analysis, analyse
from daq.series.band import fit_many
from daq.series.bars import Bar
from daq.series.compare import compare
from daq.series.factors import pivotal_bounds
from daq.series.outliers import outliers_of
from daq.series.size import three_to_quarter_point_ratio
from daq.series.weibull import WeibullFit, fit_weibull

BAR = Bar(
    number="", loading=1, order=0, counting=Counting.COUNTED, strength_mpa=None, suspended_mpa=None, method="bars",
    section=Rectangle(4.0, 3.0), spans=Spans(40.0, 20.0), population="", from_mid_mm=None, roller_diameter_mm=4.5,
    common_share=0.005, own_share=0.003, values={},
)  # fmt: skip


def bars_of(strengths, **common) -> list[Bar]:
    return [
        replace(BAR, number=f"B{n:02d}", order=n, strength_mpa=float(s), values={"order": float(n)}, **common)
        for n, s in enumerate(strengths, 1)
    ]


def scenario_12(seed: int) -> list[Bar]:
    """30 bars: A m 12, s0 420 in the volume; B m 6, s0 520 at the edge; 24 break left; bars 16 to 30 are 8 % weaker."""
    rng = np.random.default_rng(seed)
    pores, chips = 420.0 * rng.weibull(12.0, 30), 520.0 * rng.weibull(6.0, 30)
    made = bars_of(np.minimum(pores, chips) * np.where(np.arange(30) >= 15, 0.92, 1.0))
    at_mm = rng.permutation([-3.0] * 24 + [4.0] * 6)
    return [
        replace(bar, population="Pv" if pore < chip else "CKe", from_mid_mm=float(at))
        for bar, pore, chip, at in zip(made, pores, chips, at_mm, strict=True)
    ]


@pytest.mark.slow
def test_scenario_12_two_populations_trend_and_one_sided_breaks() -> None:
    """The medians over seeds are in test_weibull_oracles; here the whole series at once."""
    cautioned = 0
    for seed in range(12):
        found = analyse(scenario_12(seed))
        assert len(found.counted) == 30 and found.weibull.fit.n == 30  # no bar removed
        few = [line for line in found.reasons if "too few for an estimate of its own" in line]
        assert len(found.populations) + len(few) == 2  # a population of fewer than five breaks is told
        assert all(one.fit.n == 30 for one in found.populations)
        assert found.map.p_one_sided == pytest.approx(0.0014, abs=5e-5)
        assert any("one-sided" in line for line in found.cautions)
        told = any("with order" in line for line in found.cautions)
        assert told == (abs(found.trends["order"].rho) > 2.5758 / np.sqrt(29))
        cautioned += told
    assert 0 < cautioned < 12  # 8 % in half of the bars is often seen, not always


def test_every_estimate_says_how_it_was_made() -> None:
    found = analyse([*bars_of(400.0 * np.random.default_rng(1).weibull(12.0, 30))])
    assert "maximum likelihood" in found.weibull.method and "30 breaks" in found.weibull.method
    assert "pivotal" in found.weibull.method and set(found.weibull.bounds) == {0.90, 0.95}
    assert found.weibull.unbiased < found.weibull.fit.modulus and found.weibull.goodness is not None
    assert found.more[5][0] < 1.0 < found.more[5][1]


def test_bars_that_do_not_count_are_suspended_and_stay() -> None:
    strengths = 400.0 * np.random.default_rng(2).weibull(12.0, 12)
    counted = bars_of(strengths)
    odd = [
        replace(BAR, number="X1", counting=Counting.NOT_COUNTED, suspended_mpa=395.0),
        replace(BAR, number="X2", counting=Counting.INTERRUPTED, suspended_mpa=250.0),
    ]
    found = analyse([*counted, *odd])
    assert (found.weibull.fit.failed, found.weibull.fit.suspended) == (12, 2)
    assert found.weibull.fit.modulus == fit_weibull(list(strengths), [395.0, 250.0]).modulus
    assert "profile" in found.weibull.method and found.weibull.unbiased is None
    again = analyse([*counted, replace(odd[1], number=counted[3].number)])
    assert again.weibull.fit.suspended == 0  # broke in a later loading: counts once


@pytest.mark.parametrize(
    ("strengths", "word"),
    [([], "0 counted breaks"), ([400.0] * 4, "4 counted breaks"), ([400.0] * 8, "do not differ")],
)
def test_too_few_and_all_equal_are_one_line(strengths, word: str) -> None:
    found = analyse(bars_of(strengths))
    assert found.weibull is None and sum(word in line for line in found.reasons) == 1
    assert found.trends == {} and found.outliers == ()


@pytest.mark.parametrize(
    "other",
    [{"method": "others"}, {"spans": Spans(40.0)}, {"section": None}],
    ids=["method", "spans", "section"],
)
def test_a_mixed_series_is_told_and_the_rest_is_reduced(other) -> None:
    strengths = 400.0 * np.random.default_rng(3).weibull(12.0, 20)
    main, strange = bars_of(strengths[:18]), bars_of(strengths[18:], **other)
    strange = [replace(bar, number=f"S{bar.number}") for bar in strange]
    found = analyse([*main, *strange])
    (line,) = [line for line in found.reasons if line.startswith("mixed series")]
    assert "2 of 20 bars" in line and "SB01" in line and "\n" not in line
    assert found.weibull.fit.n == 18 and [bar.number for bar in found.pool.apart] == ["SB01", "SB02"]


def test_scaling_between_loadings() -> None:
    """At equal bar and span sigma_3pt/sigma_1/4pt = ((m+2)/2)^(1/m), the same for volume and surface;
    in tension 1/1.447326 at m = 10."""
    found = analyse(bars_of(400.0 * np.random.default_rng(4).weibull(10.0, 30)))
    m, scale = found.weibull.fit.modulus, found.weibull.fit.scale_mpa
    by = {(one.loading, one.flaws): one for one in found.sizes.scaled}
    ratio = three_to_quarter_point_ratio(m)
    assert by["three-point", "volume"].strength_mpa / scale == pytest.approx(ratio, rel=1e-9)
    assert by["three-point", "surface"].strength_mpa / scale == pytest.approx(ratio, rel=1e-9)
    tension = by["tension of the span", "volume"]
    assert tension.strength_mpa == pytest.approx(scale * ((m + 2) / (4 * (m + 1) ** 2)) ** (1 / m), rel=1e-9)
    assert tension.low_mpa < tension.strength_mpa < tension.high_mpa


def test_mean_and_its_uncertainty_keep_scatter_and_measurement_apart() -> None:
    strengths = [390.0, 400.0, 410.0, 420.0]
    mean = analyse(bars_of(strengths)).mean
    assert mean.scatter_mpa == pytest.approx(np.std(strengths, ddof=1) / 2.0)
    assert mean.common_mpa == pytest.approx(0.005 * 405.0) and mean.own_mpa == pytest.approx(
        0.003 * 405.0 / 2.0
    )
    assert mean.total_k2_mpa == pytest.approx(2.0 * np.hypot(mean.scatter_mpa, mean.common_mpa))


def test_outliers_are_flagged_and_never_dropped() -> None:
    strengths = [400.0, 402.0, 398.0, 405.0, 395.0, 401.0, 399.0, 200.0]
    found = analyse(bars_of(strengths))
    assert [found.counted[one.place].number for one in found.outliers] == ["B08"] and found.weibull.fit.n == 8
    assert outliers_of([100.0, 111.0], 4.0)[0].words.startswith("-5.2 % from the mean")
    assert outliers_of([400.0] * 9) == ()


def test_limits_of_the_method_are_said() -> None:
    found = analyse(bars_of([44.0, 45.0, 46.0, 47.0, 48.0, 49.0]), find_method("C1161-B").card)
    assert any("for a mean" in line for line in found.reasons)
    assert any("50 MPa and more" in line for line in found.reasons)
    assert any("for a Weibull estimate" in line for line in found.reasons)


def test_slow_crack_growth_across_rates() -> None:
    """n = 20 built in; three methods that differ in their rate only are taken together for this alone."""
    rng = np.random.default_rng(5)
    bars = []
    for place, rate in enumerate((0.1, 1.0, 10.0, 100.0)):
        for number in range(12):
            strength = 200.0 * rate ** (1.0 / 21.0) * rng.weibull(25.0)
            values = {"stress rate, MPa/s": rate}
            bars.append(
                replace(
                    BAR,
                    number=f"{place}-{number}",
                    strength_mpa=strength,
                    method=f"rate-{place}",
                    values=values,
                )
            )
    found = analyse(bars)
    assert abs(found.growth.n - 20.0) < 3.0 * found.growth.n_sd
    assert analyse([bar for bar in bars if bar.method in ("rate-0", "rate-3")]).growth is None


@pytest.mark.slow
def test_comparison_has_its_coverage() -> None:
    """The 90 % intervals of two series of the same population leave 1 outside in 10 % of pairs, within 3 sigma."""
    rng, draws = np.random.default_rng(6), np.random.default_rng(7)
    outside = np.zeros(3)
    pairs = 60
    for _ in range(pairs):
        a, b = 400.0 * rng.weibull(10.0, 15), 400.0 * rng.weibull(10.0, 20)
        outside += [ratio.differs for ratio in compare(a, b, draws, level=0.90, samples=2000)]
    assert np.all(outside <= 0.1 * pairs + 3.0 * np.sqrt(pairs * 0.09))


def test_comparison_tells_apart_what_differs() -> None:
    rng = np.random.default_rng(8)
    a, b = 400.0 * rng.weibull(12.0, 30), 300.0 * rng.weibull(12.0, 30)
    modulus, scale, low = compare(a, b, rng)
    assert scale.differs and low.differs and scale.interval.low < 4.0 / 3.0 < scale.interval.high
    assert modulus.n == (30, 30) and "pivots" in modulus.method
    suspended = compare(a, b, rng, first_suspended_mpa=[250.0])
    assert "MOVER" in suspended[1].method and suspended[1].differs
    assert "no comparison" in compare(a[:4], b, rng)


def coverage(n: int, series: int, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """How often the 90 % bounds hold the true m and scale."""
    modulus, log_scale = fit_many(np.log(rng.weibull(1.0, (series, n)) ** (1.0 / 12.0) * 400.0))
    inside = []
    for m, s in zip(modulus, np.exp(log_scale), strict=True):
        found = pivotal_bounds(WeibullFit(float(m), float(s), 0.0, n, n), 0.90)
        inside.append(
            (
                found.modulus.low <= 12.0 <= found.modulus.high,
                found.scale_mpa.low <= 400.0 <= found.scale_mpa.high,
            )
        )
    return np.mean(inside, axis=0)


@pytest.mark.parametrize("n", [10, 30])
def test_bounds_cover_the_truth_in_nine_of_ten_of_a_thousand_series(n: int) -> None:
    """1,000 simulated series: within three binomial standard errors (0.0095 each)."""
    assert coverage(n, 1000, np.random.default_rng(n)) == pytest.approx(
        [0.9, 0.9], abs=3 * np.sqrt(0.09 / 1000)
    )


def test_analysis_is_a_value() -> None:
    bars = scenario_12(1)
    assert analyse(bars) == analyse(list(bars)) and isinstance(analyse([]), Analysis)


def test_scenario_1_modulus_of_thirty_bars() -> None:
    """Estimates of m = 12 from 30 bars lie within 9.4 to 16.8 in at least 89 of 100 series; unbiased: times 0.954."""
    modulus, _ = fit_many(np.log(400.0 * np.random.default_rng(101).weibull(12.0, (100, 30))))
    assert np.sum((modulus >= 9.4) & (modulus <= 16.8)) >= 89
    found = analyse(bars_of(400.0 * np.random.default_rng(1).weibull(12.0, 30)))
    assert found.weibull.unbiased / found.weibull.fit.modulus == pytest.approx(0.954, abs=0.001)
