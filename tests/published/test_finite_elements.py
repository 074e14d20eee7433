"""Beam formulae against plane-stress finite elements solved here (scikit-fem, quadratic, coarse graded mesh).

Reference: finite elements solved beforehand, which used 44,000 unknowns; here about 3,000, so tolerances are wider.
"""

import numpy as np
import pytest

from daq.mechanics.contact import four_point_peak_ratio, four_point_roller_ratio, three_point_ratio
from daq.mechanics.deflection import mid_deflection_mm, shear_share_mid
from daq.mechanics.gauges import gauge_mean_share, gauge_roller_share
from daq.mechanics.sections import Rectangle, Spans
from daq.mechanics.stress import beam_stress_mpa

pytestmark = pytest.mark.slow
skfem = pytest.importorskip("skfem")

MODULUS_MPA, NU = 1000.0, 0.3
BAR = Rectangle(1.0, 1.0)
OVERHANG = 1.0
HEIGHTS = np.array([-0.5, -0.46, -0.38, -0.25, -0.1, 0.0, 0.1, 0.25, 0.38, 0.46, 0.5])


def columns(end: float, rollers: tuple[float, ...], half_patch: float) -> np.ndarray:
    """Element edges over [0, end]: patch edges exact, steps growing away from each roller, at most 0.5."""
    grow = half_patch * np.concatenate(([1.0], 1.0 + np.cumsum(1.6 ** np.arange(12))))
    wanted = np.array([0.0, end] + [r + s * half_patch for r in rollers for s in (-1.0, 1.0)])
    wanted = np.unique(wanted[(wanted >= 0.0) & (wanted <= end)])
    loose = np.unique([r + s * g for r in rollers for g in grow for s in (-1.0, 1.0)])
    far = np.array([x for x in loose if 0 < x < end and np.min(np.abs(wanted - x)) > 0.6 * half_patch])
    out = [0.0]
    for x in np.sort(np.concatenate((wanted, far)))[1:]:
        pieces = int(np.ceil((x - out[-1]) / 0.5))
        out += list(np.linspace(out[-1], x, pieces + 1)[1:])
    return np.array(out)


class HalfBar:
    """Right half of a bar of unit depth and width under 1 N in all; symmetry plane at x = 0."""

    def __init__(self, span: float, load_span: float, patch: float) -> None:
        from skfem.models.elasticity import lame_parameters, linear_elasticity

        self.spans = Spans(span, load_span)
        top, bottom, half = load_span / 2.0, span / 2.0, patch / 2.0
        self.x = columns(bottom + OVERHANG, (top, bottom), half)
        mesh = skfem.MeshQuad.init_tensor(self.x, HEIGHTS)
        self.basis = skfem.Basis(mesh, skfem.ElementVector(skfem.ElementQuad2()))
        lame = MODULUS_MPA * NU / (1.0 - NU**2)
        stiffness = skfem.asm(linear_elasticity(lame, lame_parameters(MODULUS_MPA, NU)[1]), self.basis)
        load = np.zeros(self.basis.N)
        self._press(load, top, 0.5, half, -0.5)
        self._press(load, bottom, -0.5, half, 0.5)
        symmetry = np.flatnonzero(np.abs(self.basis.doflocs[0]) < 1e-12)
        fixed = [d for d in symmetry if self._is_sideways(d)] + [self._dof(0.0, 0.0, 1)]
        self.u = skfem.solve(*skfem.condense(stiffness, load, D=np.array(fixed)))

    def _press(self, load: np.ndarray, centre: float, y: float, half: float, force_n: float) -> None:
        """Uniform pressure as consistent nodal forces: 1/6, 4/6, 1/6 of each quadratic edge (Simpson)."""
        left, right = max(centre - half, 0.0), centre + half
        for a, c in zip(self.x[:-1], self.x[1:], strict=True):
            if a >= left - 1e-9 and c <= right + 1e-9:
                share = force_n * (c - a) / (right - left)
                for x, weight in ((a, 1 / 6), ((a + c) / 2, 4 / 6), (c, 1 / 6)):
                    load[self._dof(x, y, 1)] += share * weight

    def _is_sideways(self, dof: int) -> bool:
        return self._dof(0.0, float(self.basis.doflocs[1, dof]), 0) == dof

    def _dof(self, x: float, y: float, component: int) -> int:
        """Number of the unknown at a node; a node's two components are numbered in order."""
        here = np.flatnonzero(np.hypot(self.basis.doflocs[0] - x, self.basis.doflocs[1] - y) < 1e-9)
        return int(here[component])

    def drop(self, x: float) -> float:
        """Neutral-axis deflection of the middle below that at x."""
        return float(self.u[self._dof(x, 0.0, 1)] - self.u[self._dof(0.0, 0.0, 1)])

    def bottom_stress_mpa(self, x: float) -> float:
        """E du/dx along the free face, by the quadratic through the three nodes of its element."""
        i = min(int(np.searchsorted(self.x, x + 1e-9)) - 1, self.x.size - 2)
        a, c = self.x[i], self.x[i + 1]
        t = (x - a) / (c - a)
        u = [self.u[self._dof(p, -0.5, 0)] for p in (a, (a + c) / 2.0, c)]
        slope = (4.0 * t - 3.0) * u[0] + (4.0 - 8.0 * t) * u[1] + (4.0 * t - 1.0) * u[2]
        return MODULUS_MPA * float(slope) / (c - a)


def test_three_point_wedge_stress_and_shear_deflection():
    """L/h = 10, patch 0.1 h: stress ratio 0.982273, shear coefficient 2.724 (both K)."""
    bar = HalfBar(10.0, 0.0, 0.1)
    ratio = bar.bottom_stress_mpa(0.0) / beam_stress_mpa(1.0, BAR, bar.spans)
    assert ratio == pytest.approx(three_point_ratio(1.0, 10.0, 0.1), abs=3e-4)
    coefficient = (bar.drop(5.0) / mid_deflection_mm(1.0, MODULUS_MPA, BAR, bar.spans) - 1.0) * 100.0
    assert coefficient == pytest.approx(2.724, abs=0.01)
    assert coefficient == pytest.approx(shear_share_mid(BAR, bar.spans, NU, 5.0 / 6.0) * 100.0, abs=0.45)


def test_four_point_needs_no_correction_at_mid_span():
    """40/20 on 3 mm, scaled to unit depth: 1.000000 at mid-span, 0.98688 under a roller, 1.01018 inboard
    (K).
    """
    bar = HalfBar(40.0 / 3.0, 20.0 / 3.0, 0.06)
    nominal_mpa = beam_stress_mpa(1.0, BAR, bar.spans)
    roller = 10.0 / 3.0
    assert bar.bottom_stress_mpa(0.0) / nominal_mpa == pytest.approx(1.0, abs=1e-5)
    below = bar.bottom_stress_mpa(roller) / nominal_mpa
    assert below == pytest.approx(four_point_roller_ratio(1.0, bar.spans), abs=4e-4)
    inboard = max(bar.bottom_stress_mpa(x) for x in np.linspace(roller - 0.6, roller, 40)) / nominal_mpa
    assert inboard == pytest.approx(four_point_peak_ratio(1.0, bar.spans), abs=4e-4)


def test_gauge_of_finite_length_sees_gradient_and_roller():
    """Mean strain of the finite-element bottom fibre over gauges in three-point, against beam plus strip."""
    bar = HalfBar(10.0, 0.0, 0.02)
    nominal_mpa = beam_stress_mpa(1.0, BAR, bar.spans)
    for length, place in ((0.6, 0.3), (0.5, 1.2), (1.0, 2.5)):
        x = place + length * ((np.arange(200) + 0.5) / 200 - 0.5)
        mean = np.mean([bar.bottom_stress_mpa(float(p)) for p in x]) / nominal_mpa
        expected = gauge_mean_share(length, place, bar.spans) + gauge_roller_share(
            length, place, BAR, bar.spans
        )
        assert mean == pytest.approx(expected, abs=1e-3)
