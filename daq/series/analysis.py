"""The whole statistics of a series in one value: every estimate with its method, its number of bars and its bounds.

What cannot be estimated is a line that says why; nothing is left out in silence and no bar is dropped.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise

from daq.cards.method import MethodCard
from daq.series.bars import Bar, Pooled, pooled
from daq.series.breakmap import BreakMap, break_map
from daq.series.factors import N_MIN, modulus_range, pivotal_bounds, unbiased_modulus
from daq.series.flaws import fit_populations
from daq.series.goodness import Goodness, goodness_of
from daq.series.growth import CrackGrowth, fit_crack_growth
from daq.series.outliers import Outlier, outliers_of
from daq.series.profile import WeibullBounds, profile_bounds
from daq.series.scaling import Sizes, sizes_of
from daq.series.summary import Summary, summary_of
from daq.series.trend import BARS_MIN, Trend, trend_of
from daq.series.weibull import WeibullFit, fit_weibull

LEVELS = (0.90, 0.95)
RATES_DECADES_MIN = 1.0  # between the slowest and the fastest bar
RATES_MIN = 3  # groups a factor of 3 apart; ASTM C1368 wants four rates a decade or more apart (from memory)


@dataclass(frozen=True, slots=True)
class Estimate:
    """A Weibull estimate with all that must be said with it."""

    name: str
    fit: WeibullFit
    unbiased: float | None
    bounds: Mapping[float, WeibullBounds | None]
    goodness: Goodness | None

    @property
    def method(self) -> str:
        """How it was made, and of what."""
        bars = f"{self.fit.failed} breaks"
        if self.fit.suspended:
            bars += f" and {self.fit.suspended} suspended"
        by = next((found.method for found in self.bounds.values() if found is not None), "none")
        return f"two-parameter maximum likelihood, {bars}; bounds by {by}"


@dataclass(frozen=True, slots=True)
class MeanUncertainty:
    """Of the mean strength, standard, in MPa. scatter: of the bars, s/sqrt(N). common: errors all bars share (force,
    spans). own: of the single bars, over sqrt(N). Scatter already holds what is each bar's own: never added to it."""

    scatter_mpa: float | None
    common_mpa: float | None
    own_mpa: float | None

    @property
    def total_k2_mpa(self) -> float | None:
        if self.scatter_mpa is None or self.common_mpa is None:
            return None
        return 2.0 * math.hypot(self.scatter_mpa, self.common_mpa)


@dataclass(frozen=True, slots=True)
class Analysis:
    """weibull: all pooled bars as one population; populations: by origin code. reasons: what is missing and why."""

    pool: Pooled
    counted: tuple[Bar, ...]
    suspended: tuple[Bar, ...]
    summary: Summary | None
    mean: MeanUncertainty | None
    weibull: Estimate | None
    populations: tuple[Estimate, ...]
    sizes: Sizes | None
    trends: Mapping[str, Trend]
    map: BreakMap | None
    growth: CrackGrowth | None
    outliers: tuple[Outlier, ...]
    more: Mapping[int, tuple[float, float]]
    reasons: tuple[str, ...]

    @property
    def cautions(self) -> tuple[str, ...]:
        """What a reader must not miss."""
        return tuple(_cautions(self))


def analyse(bars: Sequence[Bar], method: MethodCard | None = None) -> Analysis:
    """bars in the order of loading. method: of the series, for its own limits."""
    pool = pooled(bars)
    counted = tuple(bar for bar in pool.bars if bar.strength_mpa is not None)
    suspended = tuple(bar for bar in pool.bars if bar.strength_mpa is None and bar.suspended_mpa)
    strengths = [bar.strength_mpa for bar in counted if bar.strength_mpa is not None]
    survived = [bar.suspended_mpa for bar in suspended if bar.suspended_mpa]
    reasons = list(pool.problems)
    summary = summary_of(strengths)
    weibull = _weibull(strengths, survived, method, reasons)
    validity = None if method is None else method.validity
    if validity is not None and validity.bars_min is not None and len(strengths) < validity.bars_min:
        reasons.append(f"{len(strengths)} counted bars; the method wants {validity.bars_min} for a mean")
    weakest = None if validity is None else validity.strength_mpa_min
    if weakest is not None and summary is not None and summary.mean_mpa < weakest:
        reasons.append(f"mean {summary.mean_mpa:.4g} MPa; the method is meant for {weakest:g} MPa and more")
    return Analysis(
        pool=pool,
        counted=counted,
        suspended=suspended,
        summary=summary,
        mean=_mean(counted, summary),
        weibull=weibull,
        populations=tuple(_populations(counted, survived, reasons)),
        sizes=None if weibull is None else sizes_of(counted, weibull, LEVELS[0]),
        trends=_trends(counted, strengths),
        map=_map(pool.bars),
        growth=_growth(_same_loading(pool, counted), reasons),
        outliers=outliers_of(strengths, None if validity is None else validity.from_mean_percent_max),
        more={
            n: found for n in (5, 10) if (found := modulus_range(len(strengths) + n, LEVELS[1])) is not None
        },
        reasons=tuple(reasons),
    )


def _weibull(
    strengths: list[float], survived: list[float], method: MethodCard | None, reasons: list[str]
) -> Estimate | None:
    least = N_MIN
    if len(strengths) < least:
        reasons.append(f"no Weibull estimate: {len(strengths)} counted breaks, at least {least} are needed")
        return None
    found = estimate("all bars", strengths, survived)
    if found is None:
        reasons.append("no Weibull estimate: the strengths do not differ, so no modulus can be told")
        return None
    wanted = None if method is None else method.validity.bars_weibull_min
    if wanted is not None and len(strengths) < wanted:
        reasons.append(f"{len(strengths)} counted bars; the method wants {wanted} for a Weibull estimate")
    return found


def estimate(name: str, strengths: Sequence[float], survived: Sequence[float] = ()) -> Estimate | None:
    """Fit with bounds at every level; None where there is nothing to fit."""
    fit = fit_weibull(strengths, survived)
    if fit is None:
        return None
    bounds = {
        level: profile_bounds(strengths, survived, level) if fit.suspended else pivotal_bounds(fit, level)
        for level in LEVELS
    }
    return Estimate(name, fit, unbiased_modulus(fit), bounds, goodness_of(strengths, fit))


def _populations(counted: Sequence[Bar], survived: list[float], reasons: list[str]) -> Iterator[Estimate]:
    """One estimate a coded origin, every other bar suspended at its stress."""
    codes = [bar.population for bar in counted]
    if not any(codes):
        return
    strengths = [bar.strength_mpa for bar in counted if bar.strength_mpa is not None]
    found = fit_populations(strengths, codes, survived)
    if not found.separated:
        if found.uncoded and len(set(codes) - {""}) > 1:
            reasons.append(
                f"flaw populations are not separated: {found.uncoded} of {len(codes)} bars have no sure origin code"
            )
        return
    for code, fit in found.fits.items():
        own = [s for s, c in zip(strengths, codes, strict=True) if c == code]
        others = [s for s, c in zip(strengths, codes, strict=True) if c != code]
        if fit is None or len(own) < N_MIN:
            reasons.append(f"population {code}: {len(own)} breaks, too few for an estimate of its own")
            continue
        made = estimate(f"origin {code}", own, [*others, *survived])
        if made is not None:
            yield made


def _mean(counted: Sequence[Bar], summary: Summary | None) -> MeanUncertainty | None:
    if summary is None:
        return None
    common = [bar.common_share for bar in counted if bar.common_share is not None]
    own = [bar.own_share for bar in counted if bar.own_share is not None]
    whole = len(common) == len(counted)
    root = math.sqrt(len(counted))
    return MeanUncertainty(
        scatter_mpa=summary.u_mean_mpa,
        common_mpa=max(common) * summary.mean_mpa if whole else None,
        own_mpa=math.sqrt(math.fsum(share**2 for share in own) / len(own)) * summary.mean_mpa / root
        if whole
        else None,
    )


def _trends(counted: Sequence[Bar], strengths: list[float]) -> dict[str, Trend]:
    """Against everything that is known of at least five bars and varies."""
    found: dict[str, Trend] = {}
    for name in dict.fromkeys(key for bar in counted for key in bar.values):
        pairs = [
            (s, bar.values[name]) for s, bar in zip(strengths, counted, strict=True) if name in bar.values
        ]
        if len(pairs) < BARS_MIN:
            continue
        trend = trend_of([s for s, _ in pairs], [x for _, x in pairs])
        if trend is not None:
            found[name] = trend
    return found


def _map(bars: Sequence[Bar]) -> BreakMap | None:
    placed = [bar for bar in bars if bar.from_mid_mm is not None and bar.spans is not None]
    if not placed:
        return None
    spans = placed[0].spans
    assert spans is not None
    return break_map([bar.from_mid_mm or 0.0 for bar in placed], spans, placed[0].roller_diameter_mm)


def _same_loading(pool: Pooled, counted: Sequence[Bar]) -> list[Bar]:
    """The counted bars, and those set apart only for their method: a series at several rates has several."""
    if not counted:
        return []
    alike = (counted[0].spans, type(counted[0].section))
    others = [bar for bar in pool.apart if bar.strength_mpa is not None]
    return [*counted, *(bar for bar in others if (bar.spans, type(bar.section)) == alike)]


def _growth(counted: Sequence[Bar], reasons: list[str]) -> CrackGrowth | None:
    """Only where the rates lie far enough apart to tell; an ordinary series is silent about it."""
    name = "stress rate, MPa/s"
    pairs = [(bar.values[name], bar.strength_mpa) for bar in counted if bar.values.get(name, 0.0) > 0]
    if not pairs:
        return None
    rates = sorted(rate for rate, _ in pairs)
    if math.log10(rates[-1] / rates[0]) < RATES_DECADES_MIN:
        return None
    groups = 1 + sum(later > 3.0 * earlier for earlier, later in pairwise(rates))
    if groups < RATES_MIN:
        reasons.append(f"slow crack growth: {groups} groups of stress rates, at least {RATES_MIN} are needed")
        return None
    return fit_crack_growth([rate for rate, _ in pairs], [s for _, s in pairs if s is not None])


def _cautions(found: Analysis) -> Iterator[str]:
    for name, trend in found.trends.items():
        if trend.caution:
            text = f"strength goes with {name}: rank correlation {trend.rho:+.2f}, N = {trend.n}, p = {trend.p:.1g}"
            yield f"{text}; {len(found.trends)} such tests were made"
    if found.map is not None and found.map.caution:
        text = f"breaks are one-sided: {found.map.left} left, {found.map.right} right of mid-span"
        yield f"{text}, p = {found.map.p_one_sided:.2g} (two-sided binomial)"
    if (
        found.weibull is not None
        and found.weibull.goodness is not None
        and found.weibull.goodness.doubt is not None
    ):
        doubt = found.weibull.goodness.doubt
        yield f"one Weibull distribution does not describe these bars well (Anderson-Darling, level {doubt:g})"
    for outlier in found.outliers:
        yield f"bar {found.counted[outlier.place].number} lies far off: {outlier.words}; it is not dropped"
