"""The elastic strip under a line load: what a roller adds to the beam stress, anywhere in the lower part of a bar.

Plane elasticity of a strip of half-depth c under a line load on its upper face (Filon's integral; Timoshenko and
Goodier's table holds 1927 numerics). Derived here: stress function f(y) cos(ax), even and odd parts in y, less the
elementary bending 3/u^2. Independent of Poisson's ratio. Not for places near the loaded face itself.
"""

from __future__ import annotations

import math
from functools import cache

import numpy as np

from daq.mechanics.quantity import Floats

ABOVE_AXIS_MAX = (
    0.5  # of the half-depth: closer to the load the integral converges too slowly for these nodes
)
PANELS = (0.0, 0.5, 2.0, 6.0, 20.0, 60.0)
NODES = 48
SERIES_BELOW = 0.3  # below this u the difference sinh u cosh u - u is taken from its series


def local_beta(along: float | Floats, across: float = -1.0) -> Floats:
    """beta in: stress = beam stress + beta F/(b c).

    along: distance from the roller over the half-depth c. across: height over the middle axis over c; -1 is the
    tension face. At the tension face opposite the roller: -0.13069.
    """
    assert -1.0 <= across <= ABOVE_AXIS_MAX
    at = np.abs(np.asarray(along, dtype=np.float64))
    u, kernel = _kernel(across)
    wave = np.cos(np.multiply.outer(at, u)) @ kernel
    # 3/(1 + u^2) was taken off under the integral; its cosine transform is (3 pi/2) e^-x.
    tail = 1.5 * math.pi * across * np.exp(-at)
    return np.asarray((wave + tail) / (2.0 * math.pi), dtype=np.float64)


@cache
def _kernel(across: float) -> tuple[Floats, Floats]:
    """Nodes u and weights times the transform of the local stress at one height."""
    node, weight = np.polynomial.legendre.leggauss(NODES)
    half = np.diff(PANELS) / 2.0
    u = np.concatenate([h * node + h + start for h, start in zip(half, PANELS, strict=False)])
    w = np.concatenate([h * weight for h in half])
    sinh, cosh, v = np.sinh(u), np.cosh(u), u * across
    even_b = -sinh / (sinh * cosh + u)
    even_a = -even_b * (1.0 + u / np.tanh(u))
    odd_d = -cosh / _sinh_cosh_less(u)
    odd_c = -odd_d * (1.0 + u * np.tanh(u))
    stress = even_a * np.cosh(v) + even_b * (2.0 * np.cosh(v) + v * np.sinh(v))
    stress += odd_c * np.sinh(v) + odd_d * (2.0 * np.sinh(v) + v * np.cosh(v))
    local = stress + 3.0 * across / u**2 - 3.0 * across / (1.0 + u**2)
    return u, w * local


def _sinh_cosh_less(u: Floats) -> Floats:
    """sinh u cosh u - u without cancellation: half of sinh z - z at z = 2u."""
    z = 2.0 * u
    series = (
        z**3 / 6.0 * (1.0 + z**2 / 20.0 * (1.0 + z**2 / 42.0 * (1.0 + z**2 / 72.0 * (1.0 + z**2 / 110.0))))
    )
    return np.where(u < SERIES_BELOW, series, np.sinh(z) - z) / 2.0
