"""What is said of a series under its strip: number, mean, spread, and from five bars on Weibull with its bounds."""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache

WEIBULL_BARS_MIN = 5  # trade judgement, no source: fewer tell nothing


def series_words(strengths_mpa: Sequence[float]) -> str:
    """Method, number of bars and bounds are always named."""
    return _words(tuple(round(strength, 3) for strength in strengths_mpa))


@lru_cache(maxsize=64)
def _words(strengths_mpa: tuple[float, ...]) -> str:
    from daq.series.summary import summary_of

    summary = summary_of(strengths_mpa)
    if summary is None:
        return "no bar is broken yet"
    spread = "" if summary.spread_mpa is None else f", sd {summary.spread_mpa:.1f} MPa"
    said = f"N {summary.n}: mean {summary.mean_mpa:.1f} MPa{spread}"
    if summary.n < WEIBULL_BARS_MIN:
        return f"{said}. Weibull from {WEIBULL_BARS_MIN} bars on"
    return f"{said}. {_weibull(strengths_mpa)}"


def _weibull(strengths_mpa: tuple[float, ...]) -> str:
    from daq.series.factors import pivotal_bounds, unbiased_modulus
    from daq.series.weibull import fit_weibull

    fit = fit_weibull(strengths_mpa)
    bounds = pivotal_bounds(fit) if fit is not None else None
    if fit is None or bounds is None:
        return "Weibull: the strengths do not differ enough"
    m, s, unbiased = bounds.modulus, bounds.scale_mpa, unbiased_modulus(fit)
    return (
        f"Weibull (ML, 90 % bounds): m {fit.modulus:.1f} [{m.low:.1f}, {m.high:.1f}], unbiased {unbiased:.1f};"
        f" s0 {fit.scale_mpa:.0f} MPa [{s.low:.0f}, {s.high:.0f}]"
    )
