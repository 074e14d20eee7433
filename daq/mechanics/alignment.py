"""Bending and twist from two or more gauges on one cross-section: what the bar does besides the bending that is wanted.

The strain along a gauge is linear in four unknowns (elementary theory): axial strain, main bending, sideways bending,
and the shear of a twist. Gauges that cannot tell an unknown leave it out; nothing is guessed.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from daq.mechanics.quantity import Floats

TOLD_APART = 1e-9  # singular values below this share of the largest are not seen by these gauges


@dataclass(frozen=True, slots=True)
class Gauge:
    """Place on a cross-section and direction of one gauge.

    height: over the middle axis, 1 at the tension face, -1 at the compression face. side: 0 in the middle of the
    width, 1 at the right edge, -1 at the left. angle_deg: from the bar's axis, positive to the right.
    """

    height: float
    side: float = 0.0
    angle_deg: float = 0.0


@dataclass(frozen=True, slots=True)
class Alignment:
    """Strains at the outer fibre; None: these gauges do not tell it. residual: root mean square, 0 with just enough.

    bending: at the tension face. sideways: at the right edge. twist: shear strain of the tension face.
    """

    axial: float | None
    bending: float | None
    sideways: float | None
    twist: float | None
    residual: float

    @property
    def sideways_share(self) -> float | None:
        """Sideways over main bending: the tension face's edges differ by twice this from one another."""
        return _over(self.sideways, self.bending)

    @property
    def twist_share(self) -> float | None:
        """Shear of the twist over main bending."""
        return _over(self.twist, self.bending)

    @property
    def axial_share(self) -> float | None:
        return _over(self.axial, self.bending)


def align(gauges: Sequence[Gauge], strains: Sequence[float], poisson_ratio: float) -> Alignment:
    """Least squares over the gauges. ValueError: other than one strain for each gauge, or a strain that is no number.

    A gauge at an angle sees e (cos^2 - nu sin^2) + g sin cos (uniaxial stress with shear).
    """
    if len(gauges) != len(strains) or not gauges:
        raise ValueError(f"{len(strains)} strains for {len(gauges)} gauges: give one strain for each gauge")
    measured = np.asarray(strains, dtype=np.float64)
    if not np.all(np.isfinite(measured)):
        raise ValueError("a strain is not a finite number: leave that gauge out")
    rows = np.array([_row(gauge, poisson_ratio) for gauge in gauges])
    left, size, right = np.linalg.svd(rows, full_matrices=False)
    seen = size > TOLD_APART * size[0] if size[0] > 0 else np.zeros(size.shape, dtype=bool)
    answer: Floats = right[seen].T @ ((left.T @ measured)[seen] / size[seen])
    # An unknown is told only where it lies wholly in what the gauges see.
    told = np.sum(right[seen] ** 2, axis=0) > 1.0 - 1e-9
    axial, bending, sideways, twist = (
        float(value) if one else None for value, one in zip(answer, told, strict=True)
    )
    residual = float(np.sqrt(np.mean((rows @ answer - measured) ** 2)))
    return Alignment(axial, bending, sideways, twist, residual)


def uneven_ends(left_strain: float, right_strain: float) -> float:
    """Two gauges at equal distances left and right of mid-span: half their difference over their mean.

    In four-point, inside the load span, this is the change of the moment from the middle to a gauge: a load roller off
    the middle, or a fixture that does not tilt.
    """
    mean = (left_strain + right_strain) / 2.0
    return (right_strain - left_strain) / 2.0 / mean


def _row(gauge: Gauge, poisson_ratio: float) -> tuple[float, float, float, float]:
    angle = math.radians(gauge.angle_deg)
    along = math.cos(angle) ** 2 - poisson_ratio * math.sin(angle) ** 2
    # The shear of a twist turns round with the face, and has no part at mid-depth of these gauges.
    return along, along * gauge.height, along * gauge.side, gauge.height * math.sin(angle) * math.cos(angle)


def _over(part: float | None, bending: float | None) -> float | None:
    return None if part is None or bending is None or bending == 0.0 else part / bending
