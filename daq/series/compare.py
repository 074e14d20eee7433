"""Two series beside each other: ratios of modulus, characteristic strength and low quantile with honest intervals.

Complete samples: generalized pivots, from the same simulated m_hat/m and m_hat ln(s_hat/s) as the bounds of one series
(exact for the modulus and the scale of each). Suspended bars: the profile bounds of both put together by the square
root of the sum of squares on the logarithm (MOVER: Zou and Donner 2008, from memory). The generator is an argument.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from daq.mechanics.quantity import Floats
from daq.series.band import fit_many
from daq.series.factors import N_MIN
from daq.series.profile import Interval, profile_bounds
from daq.series.weibull import WeibullFit, fit_weibull

SAMPLES = 20_000


@dataclass(frozen=True, slots=True)
class Ratio:
    """First over second. differs: 1 lies outside the interval."""

    what: str
    value: float
    interval: Interval
    method: str
    n: tuple[int, int]
    level: float

    @property
    def differs(self) -> bool:
        low, high = self.interval.low, self.interval.high
        return (low is not None and low > 1.0) or (high is not None and high < 1.0)


def compare(
    first_mpa: Sequence[float],
    second_mpa: Sequence[float],
    rng: np.random.Generator,
    *,
    first_suspended_mpa: Sequence[float] = (),
    second_suspended_mpa: Sequence[float] = (),
    level: float = 0.95,
    samples: int = SAMPLES,
) -> tuple[Ratio, ...] | str:
    """Ratios, or why there are none."""
    sides = []
    for name, strengths, suspended in (
        ("first", first_mpa, first_suspended_mpa),
        ("second", second_mpa, second_suspended_mpa),
    ):
        fit = fit_weibull(strengths, suspended) if len(strengths) >= N_MIN else None
        if fit is None:
            wanted = f"{N_MIN} that differ are needed"
            return f"no comparison: {len(strengths)} counted breaks in the {name} series, {wanted}"
        sides.append(fit)
    a, b = sides
    if a.suspended or b.suspended:
        return _by_profile(a, b, first_mpa, second_mpa, first_suspended_mpa, second_suspended_mpa, level)
    return _by_pivots(a, b, rng, level, samples)


def _by_pivots(
    a: WeibullFit, b: WeibullFit, rng: np.random.Generator, level: float, samples: int
) -> tuple[Ratio, ...]:
    (m_a, s_a), (m_b, s_b) = _pivots(a, rng, samples), _pivots(b, rng, samples)
    return (
        _ratio("Weibull modulus", a.modulus / b.modulus, m_a / m_b, a, b, level),
        _ratio("characteristic strength", a.scale_mpa / b.scale_mpa, s_a / s_b, a, b, level),
        _ratio("strength at 1 % failure", a.quantile_mpa(0.01) / b.quantile_mpa(0.01),
               _quantile(m_a, s_a, 0.01) / _quantile(m_b, s_b, 0.01), a, b, level),
    )  # fmt: skip


def _pivots(fit: WeibullFit, rng: np.random.Generator, samples: int) -> tuple[Floats, Floats]:
    """Modulus and scale that are as likely as this fit makes them: m_hat/q and s_hat exp(-t/m_hat)."""
    modulus, log_scale = fit_many(np.log(rng.weibull(1.0, (samples, fit.n))))
    return fit.modulus / modulus, fit.scale_mpa * np.exp(-modulus * log_scale / fit.modulus)


def _quantile(modulus: Floats, scale: Floats, probability: float) -> Floats:
    found: Floats = scale * (-math.log1p(-probability)) ** (1.0 / modulus)
    return found


def _ratio(what: str, value: float, drawn: Floats, a: WeibullFit, b: WeibullFit, level: float) -> Ratio:
    low, high = np.quantile(drawn, [(1.0 - level) / 2.0, (1.0 + level) / 2.0])
    return Ratio(what, value, Interval(float(low), float(high)), "generalized pivots", (a.n, b.n), level)


def _by_profile(
    a: WeibullFit, b: WeibullFit, first: Sequence[float], second: Sequence[float],
    first_suspended: Sequence[float], second_suspended: Sequence[float], level: float,
) -> tuple[Ratio, ...]:  # fmt: skip
    bounds_a, bounds_b = (
        profile_bounds(first, first_suspended, level),
        profile_bounds(second, second_suspended, level),
    )
    assert bounds_a is not None and bounds_b is not None
    pairs = (
        ("Weibull modulus", a.modulus, b.modulus, bounds_a.modulus, bounds_b.modulus),
        ("characteristic strength", a.scale_mpa, b.scale_mpa, bounds_a.scale_mpa, bounds_b.scale_mpa),
    )
    return tuple(
        Ratio(what, x / y, _mover(x, y, i, j), "profile likelihood, MOVER", (a.n, b.n), level)
        for what, x, y, i, j in pairs
    )


def _mover(x: float, y: float, of_x: Interval, of_y: Interval) -> Interval:
    """On the logarithm; a bound that is not there stays away."""
    value = math.log(x / y)

    def reach(one: float | None, other: float | None) -> float | None:
        if one is None or other is None:
            return None
        return math.hypot(math.log(one / x), math.log(other / y))

    down, up = reach(of_x.low, of_y.high), reach(of_x.high, of_y.low)
    return Interval(
        None if down is None else math.exp(value - down), None if up is None else math.exp(value + up)
    )
