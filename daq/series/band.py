"""Bounds of a whole Weibull line: for each probability, between which stresses it lies. Complete samples
only.

m_hat (ln x_hat_P - ln x_P) does not depend on the true parameters, so it is simulated once for this number
of bars (pivotal quantities, the same idea as the table in `factors`). The random generator is an argument.
"""

from __future__ import annotations

import numpy as np

from daq.mechanics.quantity import Floats
from daq.series.factors import N_MIN
from daq.series.weibull import WeibullFit

SAMPLES = 4_000
STEPS_MAX = 60


def quantile_band_mpa(
    fit: WeibullFit, probabilities: Floats, rng: np.random.Generator, level: float = 0.90
) -> tuple[Floats, Floats] | None:
    """Lower and upper stress for each probability; None below 5 bars and with suspended bars."""
    if fit.suspended or fit.n < N_MIN:
        return None
    modulus, log_scale = fit_many(np.log(rng.weibull(1.0, (SAMPLES, fit.n))))
    height = np.log(-np.log1p(-probabilities))
    pivots = modulus[:, None] * (log_scale[:, None] - height) + height
    low, high = np.quantile(pivots, [(1.0 - level) / 2.0, (1.0 + level) / 2.0], axis=0)
    log_quantile = np.log(fit.scale_mpa) + height / fit.modulus
    return np.exp(log_quantile - high / fit.modulus), np.exp(log_quantile - low / fit.modulus)


def fit_many(log_stress: Floats) -> tuple[Floats, Floats]:
    """Modulus and ln scale of each row of complete samples: the same equation as `weibull`, Newton on
    all at once.
    """
    top = log_stress.max(axis=1, keepdims=True)
    off = log_stress - top
    mean = off.mean(axis=1)
    modulus = 1.28 / off.std(axis=1)  # exact for the standard deviation of ln x: pi/sqrt(6) = 1.28
    for _ in range(STEPS_MAX):
        weight = np.exp(modulus[:, None] * off)
        whole = weight.sum(axis=1)
        first = (weight * off).sum(axis=1) / whole
        second = (weight * off * off).sum(axis=1) / whole
        step = (first - mean - 1.0 / modulus) / (second - first**2 + 1.0 / modulus**2)
        after = np.maximum(modulus - step, modulus / 2.0)
        settled = bool(np.max(np.abs(after / modulus - 1.0)) < 1e-10)
        modulus = after
        if settled:
            break
    whole = np.exp(modulus[:, None] * off).mean(axis=1)
    return modulus, np.log(whole) / modulus + top[:, 0]
