"""Large deflection against the elastica solved here, edges against polygons, the strip against exact table values.

Marks: C confirmed on a public page, K computed with an independent general library, M from memory.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import quad, solve_ivp
from scipy.optimize import brentq

from daq.mechanics.contact import INBOARD_PEAK, UNDER_LOAD_ROLLER, WEDGE_POINT, roller_stress_mpa
from daq.mechanics.edges import chamfer_factor, rounded_edge_factor
from daq.mechanics.large import LargeDeflection, strain_third_point, strain_three_point, stress_factor
from daq.mechanics.sections import Rectangle, Spans
from daq.mechanics.stress import beam_stress_mpa
from daq.mechanics.strip import local_beta

BAR = Rectangle(4.0, 3.0)


def polygon_second_moment(points: np.ndarray) -> float:
    """Exact integral of y^2 over a polygon (Green's theorem), vertices counter-clockwise."""
    x, y = points.T
    xn, yn = np.roll(x, -1), np.roll(y, -1)
    return float(np.sum((x * yn - xn * y) * (y**2 + y * yn + yn**2)) / 12.0)


def corners(section: Rectangle, corner) -> np.ndarray:
    """A rectangle whose corners are replaced by the points of `corner`, given for the upper right one."""
    b, h = section.width_mm / 2.0, section.thickness_mm / 2.0
    right = np.array([(b - dx, h - dy) for dx, dy in corner])  # counter-clockwise: from the side to the top
    left = np.array([(-x, y) for x, y in right[::-1]])
    low = np.array([(x, -y) for x, y in np.concatenate((right, left))[::-1]])
    return np.concatenate((right, left, low))


@pytest.mark.parametrize("leg_mm", [0.05, 0.12, 0.15, 0.2, 0.6])
def test_chamfer_against_the_polygon(leg_mm: float):
    polygon = corners(BAR, [(0.0, leg_mm), (leg_mm, 0.0)])
    assert chamfer_factor(BAR, leg_mm) == pytest.approx(
        BAR.second_moment_mm4 / polygon_second_moment(polygon), rel=1e-12
    )


@pytest.mark.parametrize("radius_mm", [0.1, 0.5])
def test_rounded_edges_against_a_fine_polygon(radius_mm: float):
    angle = np.linspace(0.0, math.pi / 2.0, 400)
    arc = [(radius_mm * (1 - math.cos(a)), radius_mm * (1 - math.sin(a))) for a in angle]
    polygon = corners(BAR, arc)
    assert rounded_edge_factor(BAR, radius_mm) == pytest.approx(
        BAR.second_moment_mm4 / polygon_second_moment(polygon), rel=1e-6
    )


# --- the strip ---


@pytest.mark.parametrize(
    ("along", "beta", "digits"),
    [  # tension face, exact, K
        (0.0, -0.1306915, 2e-6),
        (0.25, 0.01484, 1e-5),
        (0.5, 0.08517, 1e-5),
        (0.75, 0.10187, 1e-5),
        (1.0, 0.08922, 1e-5),
        (1.5, 0.04357, 1e-5),
        (2.0, 0.01413, 1e-5),
        (3.0, -0.00009, 1e-5),
    ],
)
def test_local_stress_at_the_tension_face(along: float, beta: float, digits: float):
    assert float(local_beta(along)) == pytest.approx(beta, abs=digits)


@pytest.mark.parametrize(("across", "beta"), [(0.5, 0.42861), (0.0, 0.12434), (-0.5, -0.13401)])
def test_local_stress_across_the_depth(across: float, beta: float):
    """Exact, K; the textbook table has 0.428, 0.121, -0.136 (M)."""
    assert float(local_beta(0.0, across)) == pytest.approx(beta, abs=1e-5)


@pytest.mark.parametrize("along", [0.0, 0.4, 1.7, 4.0])
def test_local_stress_keeps_the_moment(along: float):
    """The local field below the loaded face is in balance with the beam: far away nothing is left."""
    assert abs(float(local_beta(along + 6.0))) < 2e-5


def test_the_four_point_constants_follow_from_the_strip():
    """0.1742553 opposite a roller in three-point; 0.06791 at 0.375 h inboard and -0.08713 under a load roller (K)."""
    three, four = Spans(40.0), Spans(40.0, 20.0)
    opposite = float(roller_stress_mpa(0.0, 1.0, BAR, three)) / beam_stress_mpa(1.0, BAR, three)
    assert -opposite * 40.0 / 3.0 == pytest.approx(WEDGE_POINT, abs=2e-6)
    nominal = beam_stress_mpa(1.0, BAR, four)
    below = float(roller_stress_mpa(10.0, 1.0, BAR, four)) / nominal
    assert below * 20.0 / 3.0 == pytest.approx(UNDER_LOAD_ROLLER, abs=1e-5)
    inboard = float(roller_stress_mpa(10.0 - 0.375 * 3.0, 1.0, BAR, four)) / nominal
    assert inboard * 20.0 / 3.0 == pytest.approx(INBOARD_PEAK, abs=1e-5)
    x_mm = np.linspace(8.0, 9.9, 400)
    added = roller_stress_mpa(x_mm, 1.0, BAR, four) / nominal
    assert added.max() == pytest.approx(inboard, rel=1e-3)
    assert (10.0 - x_mm[np.argmax(added)]) / 3.0 == pytest.approx(0.375, abs=0.02)


# --- the elastica: frictionless rollers at fixed spans push at right angles to the bar; thin bar (EI = 1, L = 2) ---


def half_bar(load: float, arm: float) -> tuple[float, float]:
    """(mid-span deflection, moment at mid-span) of half a bar of half-span 1, load roller at `arm` from the support.

    From the middle outwards theta' = M, with M of the forces further out: the support (up, and outwards by the slope
    there), and the load roller (down, and inwards by the slope there). Solved by repeating until the slopes agree.
    """
    roller = 1.0 - arm
    end, sag, slope, height = load * arm * (2.0 - arm) / 2.0, 0.0, 0.0, 0.0

    def run_once() -> tuple[float, float, float, float]:
        def rates(s: float, state: np.ndarray) -> list[float]:
            x, y, theta = state
            moment = load * (1.0 - x) + load * math.tan(end) * (sag - y)
            if x < roller:
                moment -= load * (roller - x) + load * math.tan(slope) * (height - y)
            return [math.cos(theta), math.sin(theta), moment]

        def reached(s: float, state: np.ndarray) -> float:
            return state[0] - 1.0

        def passed(s: float, state: np.ndarray) -> float:
            return state[0] - roller

        reached.terminal = True  # type: ignore[attr-defined]
        run = solve_ivp(rates, (0.0, 3.0), [0.0, 0.0, 0.0], events=(reached, passed), rtol=1e-9, atol=1e-12)
        at_roller = run.y_events[1][0] if roller > 0 else np.zeros(3)
        return run.y[2, -1], run.y[1, -1], at_roller[2], at_roller[1]

    for _ in range(100):
        before = (end, sag, slope, height)
        end, sag, slope, height = run_once()
        if max(abs(a - b) for a, b in zip(before, (end, sag, slope, height), strict=True)) < 1e-10:
            break
    moment = (
        load * arm + load * math.tan(end) * sag - (load * math.tan(slope) * height if roller > 0 else 0.0)
    )
    return sag, moment


@pytest.mark.slow
@pytest.mark.parametrize("load", [0.12, 0.3, 0.55])
def test_three_point_large_deflection_against_the_elastica(load: float):
    """Strain series of ISO 14125 (M) to 0.25 %; moment 1 + 6 (s/L)^2 to 2e-3 up to s/L = 0.1."""
    sag, moment = half_bar(load, 1.0)
    x = sag / 2.0
    assert x < 0.17
    exact = moment * 2.0 / 2.0  # eps L/h = M L/(2 E I), L = 2
    assert strain_three_point(x * 100.0, 100.0, 2.0) * 50.0 == pytest.approx(exact, rel=2.5e-3)
    if x < 0.1:
        thin = stress_factor(LargeDeflection.ISO_14125_3_POINT, x * 100.0, 100.0, 1e-9)
        assert moment / load == pytest.approx(thin, abs=2e-3)


@pytest.mark.slow
@pytest.mark.parametrize("load", [0.15, 0.4])
def test_third_point_large_deflection_against_the_elastica(load: float):
    """Strain series of ISO 14125 (M) to 0.25 %; the coefficient 8.78 of (s/L)^2 (K: 8.785)."""
    sag, moment = half_bar(load, 2.0 / 3.0)
    x = sag / 2.0
    exact = moment
    assert strain_third_point(x * 100.0, 100.0, 2.0) * 50.0 == pytest.approx(exact, rel=2.5e-3)
    if x < 0.05:
        assert (moment / (load * 2.0 / 3.0) - 1.0) / x**2 == pytest.approx(8.785, abs=0.05)


@pytest.mark.slow
def test_quarter_point_moment_coefficient():
    """Moment 1 + 10.72 (s/L)^2 at the quarter points (K); D6272 prints a thickness term only (M)."""
    sag, moment = half_bar(0.15, 0.5)
    assert (moment / 0.075 - 1.0) / (sag / 2.0) ** 2 == pytest.approx(10.72, abs=0.08)


def test_the_elastica_of_a_small_load_is_the_beam():
    """s = F L^3/(48 EI) with F = 2 load, L = 2: load/3 x 1."""
    sag, moment = half_bar(1e-3, 1.0)
    assert sag == pytest.approx(2e-3 * 8.0 / 48.0, rel=1e-5)
    assert moment == pytest.approx(1e-3, rel=1e-5)


def test_the_inboard_peak():
    """Where the local stress of one roller is highest: 0.75 c along (K), by an independent root of its slope."""
    place = brentq(lambda a: float(local_beta(a + 1e-4) - local_beta(a - 1e-4)), 0.5, 1.0)
    assert place == pytest.approx(0.75, abs=0.02)


def test_the_whole_of_the_local_stress():
    """Its integral along half the bar is c/10: a quarter of 2/5, the limit of the transform at u = 0 (algebra)."""
    whole, _ = quad(lambda a: float(local_beta(a)), 0.0, 12.0, limit=200)
    assert whole == pytest.approx(0.1, abs=1e-5)
