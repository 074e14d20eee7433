"""Crack growth, calibration line, uncertainty and rounding against values from outside."""

import math
from decimal import Decimal
from pathlib import Path

import numpy as np
import pytest

from daq.cards.load import load_frame, load_method
from daq.cards.series import Specimen
from daq.results.fits import fit_curve
from daq.results.setup import setup_of
from daq.results.uncertainty import uncertainty_of
from daq.series.growth import (
    damage_constant_mpa2_s,
    fit_crack_growth,
    strength_at_rate_mpa,
    strength_change_per_decade,
)
from daq.series.rounding import round_to_step

EXAMPLES = Path(__file__).resolve().parents[2] / "daq" / "cards" / "examples"
RATES = [0.01, 0.1, 1.0, 10.0, 100.0]
STRENGTHS = [178.7514, 189.0775, 200.0, 211.5535, 223.7744]


def test_exact_line_of_crack_growth():
    """n = 40, D = 200 (K)."""
    exact = [200.0 * rate ** (1.0 / 41.0) for rate in RATES]
    assert exact == pytest.approx(STRENGTHS, abs=6e-5)
    growth = fit_crack_growth(RATES, exact)
    assert (growth.n, growth.d_mpa) == (pytest.approx(40.0, rel=1e-10), pytest.approx(200.0, rel=1e-12))
    assert strength_at_rate_mpa(growth, 0.1) == pytest.approx(189.0775, abs=6e-5)


def test_fifteen_points_of_crack_growth():
    """round(those x {.98, 1, 1.02}, 1), base-10 logarithms, individual points (form M, values K)."""
    points = [
        (rate, round(s * f, 1)) for rate, s in zip(RATES, STRENGTHS, strict=True) for f in (0.98, 1.0, 1.02)
    ]
    growth = fit_crack_growth(*zip(*points, strict=True))
    assert growth.slope == pytest.approx(0.02437731, abs=6e-9)
    assert growth.intercept == pytest.approx(2.30099230, abs=6e-9)
    assert (growth.slope_sd, growth.intercept_sd) == (
        pytest.approx(0.00139021, abs=6e-9),
        pytest.approx(0.00196606, abs=6e-9),
    )
    assert (growth.n, growth.d_mpa) == (pytest.approx(40.02175, abs=6e-6), pytest.approx(199.98264, abs=6e-6))
    assert (growth.n_sd, growth.d_sd_mpa) == (
        pytest.approx(2.33943, abs=6e-6),
        pytest.approx(0.90532, abs=6e-6),
    )
    assert growth.correlation == pytest.approx(0.979508, abs=6e-7)


def test_damage_constant_and_the_full_equation():
    """S_i = 300: B = 3.970437e-2 MPa^2 s; the strengths solve S_i^(n-2) - s^(n-2) = s^(n+1)/[B rate
    (n+1)] (K).
    """
    b = damage_constant_mpa2_s(200.0, 40.0, 300.0)
    assert b == pytest.approx(3.970437e-2, rel=2e-7)
    for rate, strength in zip(RATES, STRENGTHS, strict=True):
        left = 1.0 - (strength / 300.0) ** 38
        right = strength**3 * (strength / 300.0) ** 38 / (b * rate * 41.0)
        assert left == pytest.approx(right, rel=5e-5)


def test_strength_per_decade_of_rate():
    """10^(1/(n+1)) - 1: 19 % at n = 12, 11.6 % at 20, 6.4 % at 36."""
    for n, share in ((12.0, 0.19), (20.0, 0.116), (36.0, 0.064)):
        assert strength_change_per_decade(n) == pytest.approx(share, abs=0.005)


def test_calibration_line_of_the_guide():
    """GUM H.3 (data M, answers reproduced K): y1 -.1712 (.0029), y2 .00218 (.00067), r -.930, s
    .0035, b(30) -.1494.
    """
    t = np.array([21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511])
    b = np.array([-0.171, -0.169, -0.166, -0.159, -0.164, -0.165, -0.156, -0.157, -0.159, -0.161, -0.160])
    line = fit_curve(t, b, 2)
    white = line.spread / math.sqrt(line.thinning)  # the guide takes the residuals as uncorrelated
    assert line.spread == pytest.approx(0.0035, abs=6e-5)
    assert (line.at(20.0), line.u_at(20.0, white)) == (
        pytest.approx(-0.1712, abs=6e-5),
        pytest.approx(0.0029, abs=6e-5),
    )
    assert (line.slope, line.u_term(1, white)) == (
        pytest.approx(0.00218, abs=6e-6),
        pytest.approx(0.00067, abs=6e-6),
    )
    assert (line.at(30.0), line.u_at(30.0, white)) == (
        pytest.approx(-0.1494, abs=6e-5),
        pytest.approx(0.0041, abs=6e-5),
    )
    correlation = (
        -(line.origin - 20.0)
        * line.covariance[1][1]
        / math.sqrt(
            line.covariance[1][1]
            * (line.covariance[0][0] + (line.origin - 20.0) ** 2 * line.covariance[1][1])
        )
    )
    assert correlation == pytest.approx(-0.930, abs=6e-4)


def budget(fixture: str, load_n: float):
    """F +-1 %, spans +-0.1, b 4 and h 3 +-0.01, all rectangular; nothing else."""
    frame = load_frame(EXAMPLES / "kiln-lane-a.toml")
    cell = frame.cell.model_copy(update={"uncertainty_percent": 2.0 / math.sqrt(3.0)})
    frame = frame.model_copy(update={"cell": cell})
    method = load_method(EXAMPLES / "alumina-bars.toml").model_copy(update={"dimension_u_mm": 0.01})
    bar = Specimen(number="A", width_mm=(4.0,), thickness_mm=(3.0,))
    setup = setup_of(frame, method, bar, fixture)
    found = uncertainty_of(setup, load_n=load_n, u_peak_n=0.0, u_tare_n=0.0, lag_known=True)
    return load_n * setup.stress_per_newton_mpa, found


def test_budget_of_the_guide_three_point():
    """F = 450, L = 40: sigma 750, contributions 4.3301, 1.0825, 1.0825, 2.8868, u 5.4247 (0.7233 %),
    U 10.849 (K).
    """
    sigma, found = budget("three-40", 450.0)
    assert sigma == pytest.approx(750.0, rel=1e-12)
    parts = {part.name: part.share * sigma for part in found.contributors if part.share}
    expected = {"force reading": 4.3301, "support span": 1.0825, "width": 1.0825, "thickness": 2.8868}
    assert parts == pytest.approx(expected, abs=6e-5)
    assert (found.share * sigma, 2.0 * found.share * sigma) == (
        pytest.approx(5.4247, abs=6e-5),
        pytest.approx(10.849, abs=6e-4),
    )
    rng = np.random.default_rng(4)

    def even(middle: float, half: float):
        return middle + half * (2.0 * rng.random(200_000) - 1.0)

    drawn = 3.0 * even(450, 4.5) * even(40, 0.1) / (2.0 * even(4, 0.01) * even(3, 0.01) ** 2)
    assert (drawn.mean(), drawn.std()) == (pytest.approx(750.011, abs=0.05), pytest.approx(5.4244, abs=0.03))


def test_budget_of_the_guide_four_point():
    """40/20, F = 1000: 833.3333 MPa, 0.81791 %; span terms over (L - Li) (K)."""
    sigma, found = budget("quarter-40-20", 1000.0)
    assert (sigma, found.share) == (pytest.approx(833.3333, abs=6e-5), pytest.approx(0.0081791, abs=6e-8))


@pytest.mark.parametrize(
    ("value", "step", "rounded"),
    [  # ASTM E29 examples (C)
        ("45.7500", "0.1", "45.8"),
        ("45.4500", "0.1", "45.4"),
        ("45.45001", "0.1", "45.5"),
        ("60.25132", "0.1", "60.3"),
        ("5.025", "0.05", "5.00"),
        ("5.075", "0.05", "5.10"),
        ("2.5", "1", "2"),
        ("3.5", "1", "4"),
    ],
)
def test_rounding_to_even(value: str, step: str, rounded: str):
    assert round_to_step(value, step) == Decimal(rounded)


def test_binary_number_next_to_a_tie_is_no_tie():
    """The float 45.45 lies a little above 45.45."""
    assert round_to_step(45.45, "0.1") == Decimal("45.5")
