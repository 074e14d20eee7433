"""Two-parameter Weibull by maximum likelihood, with suspended bars kept in: P = 1 - exp(-(s/s0)^m).

Source: the equations of ASTM C1239 and ISO 20501, from memory; no value is
copied. Suspended = survived to this stress, or broke from another flaw: never thrown away. Three parameters
are not fitted.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from daq.mechanics.quantity import Floats

NEWTON_STEPS_MAX = 200
TOLERANCE = 1e-13
MODULUS_MAX = 1e6


@dataclass(frozen=True, slots=True)
class WeibullFit:
    """modulus as estimated (biased: see `factors.unbiased_modulus`); n bars of which `failed` broke
    from this flaw.
    """

    modulus: float
    scale_mpa: float
    log_likelihood: float
    n: int
    failed: int

    @property
    def suspended(self) -> int:
        return self.n - self.failed

    def probability(self, stress_mpa: float) -> float:
        """Share of bars that break below this stress."""
        return -math.expm1(-((stress_mpa / self.scale_mpa) ** self.modulus))

    def quantile_mpa(self, probability: float) -> float:
        """Stress below which this share breaks."""
        return float(self.scale_mpa * (-math.log1p(-probability)) ** (1.0 / self.modulus))

    @property
    def mean_mpa(self) -> float:
        return self.scale_mpa * math.gamma(1.0 + 1.0 / self.modulus)

    @property
    def variation(self) -> float:
        """Coefficient of variation."""
        second = math.gamma(1.0 + 2.0 / self.modulus)
        return math.sqrt(second / math.gamma(1.0 + 1.0 / self.modulus) ** 2 - 1.0)


def fit_weibull(failed_mpa: Sequence[float], suspended_mpa: Sequence[float] = ()) -> WeibullFit | None:
    """None where there is nothing to fit: fewer than two breaks, or no break below the highest stress."""
    failed = np.asarray(failed_mpa, dtype=np.float64)
    whole = np.concatenate((failed, np.asarray(suspended_mpa, dtype=np.float64)))
    if failed.size < 2 or not np.all(np.isfinite(whole) & (whole > 0)):
        return None
    off = np.log(whole) - math.log(float(whole.max()))
    mean_failed = float(np.mean(off[: failed.size]))
    if not mean_failed < 0.0:
        return None
    modulus = _solve(off, mean_failed)
    if not modulus < MODULUS_MAX:
        return None
    scale_mpa = scale_for(modulus, whole, failed.size)
    return WeibullFit(
        modulus,
        scale_mpa,
        log_likelihood(modulus, scale_mpa, failed, whole),
        int(whole.size),
        int(failed.size),
    )


def scale_for(modulus: float, whole_mpa: Floats, failed: int) -> float:
    """Scale of greatest likelihood at this modulus: (sum x^m / r)^(1/m), sum over all bars."""
    top = float(whole_mpa.max())
    return float(top * (np.sum((whole_mpa / top) ** modulus) / failed) ** (1.0 / modulus))


def log_likelihood(modulus: float, scale_mpa: float, failed_mpa: Floats, whole_mpa: Floats) -> float:
    """Density of the broken, survival of all (the broken's survival factor is in both)."""
    r = failed_mpa.size
    broken = r * math.log(modulus / scale_mpa) + (modulus - 1.0) * float(
        np.sum(np.log(failed_mpa / scale_mpa))
    )
    return broken - float(np.sum((whole_mpa / scale_mpa) ** modulus))


def _equation(modulus: float, off: Floats, mean_failed: float) -> tuple[float, float]:
    """sum x^m ln x / sum x^m - mean ln x of the broken - 1/m, and its derivative; logs off the
    highest stress.
    """
    weight = np.exp(modulus * off)
    whole = float(np.sum(weight))
    first = float(weight @ off) / whole
    second = float(weight @ (off * off)) / whole
    return first - mean_failed - 1.0 / modulus, second - first**2 + 1.0 / modulus**2


def _solve(off: Floats, mean_failed: float) -> float:
    """The equation rises with m: Newton inside a bracket that halves whenever Newton would leave it."""
    low, high = 0.0, MODULUS_MAX
    modulus = -1.0 / mean_failed
    for _ in range(NEWTON_STEPS_MAX):
        value, derivative = _equation(modulus, off, mean_failed)
        low, high = (low, modulus) if value > 0.0 else (modulus, high)
        tried = modulus - value / derivative
        step = tried if low < tried < high else (low + high) / 2.0 if high < MODULUS_MAX else 2.0 * modulus
        if abs(step - modulus) <= TOLERANCE * modulus:
            return step
        modulus = step
    return modulus
