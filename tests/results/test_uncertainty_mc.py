"""The budget of one strength against a Monte Carlo of its own inputs: the mechanics drawn 200,000 times, GUM aside."""

from __future__ import annotations

import numpy as np
import pytest

from daq.results.setup import setup_from_cards
from daq.results.uncertainty import uncertainty_of

N = 200_000
LOAD_N, U_PEAK_N, U_TARE_N = 460.0, 1.1, 0.4


def rectangular(rng: np.random.Generator, middle: float, half: float) -> np.ndarray:
    return middle + half * (2.0 * rng.random(N) - 1.0)


def drawn(rng: np.random.Generator, middle: float, readings: list[float], gauge_mm: float) -> np.ndarray:
    """Mean of the readings: scatter as a normal, the gauge's own as a rectangle."""
    scatter = np.std(readings, ddof=1) / np.sqrt(len(readings)) if len(readings) > 1 else 0.0
    return rectangular(rng, middle, gauge_mm) + scatter * rng.standard_normal(N)


@pytest.mark.parametrize("shape", ["rectangle", "circle", "tube"])
@pytest.mark.parametrize("geometry", ["4-point", "3-point"])
def test_budget_agrees_with_drawn_inputs(made, shape: str, geometry: str) -> None:
    rng = np.random.default_rng(3)
    cards = made.made_cards(made.Bar(method_changes={"section": shape, "dimension_u_mm": 0.02}))
    width, thickness = [4.00, 4.03, 3.97], [3.01, 2.99, 3.00]
    cards["specimen"] |= {"width_mm": width, "thickness_mm": thickness}
    if shape == "tube":
        cards["specimen"]["inner_diameter_mm"] = 1.8
    fixture = cards["frame"]["fixtures"][0]
    fixture |= {"geometry": geometry, "load_span_mm": 20.0 if geometry == "4-point" else 0.0}
    setup = setup_from_cards(cards)
    assert setup.missing == ()
    found = uncertainty_of(setup, load_n=LOAD_N, u_peak_n=U_PEAK_N, u_tare_n=U_TARE_N, lag_known=True)
    load = LOAD_N * (1.0 + 0.005 / 2.0 * rng.standard_normal(N))  # card: 0.5 %, k = 2
    load += U_PEAK_N * rng.standard_normal(N) + U_TARE_N * rng.standard_normal(N)
    arm = rectangular(rng, fixture["support_span_mm"], fixture["support_span_u_mm"])
    if geometry == "4-point":
        arm -= rectangular(rng, fixture["load_span_mm"], fixture["load_span_u_mm"])
    depth = drawn(rng, 3.0, thickness, 0.02)
    if shape == "rectangle":
        modulus = drawn(rng, 4.0, width, 0.02) * depth**2 / 6.0
    else:
        inner = rectangular(rng, 1.8, 0.02) if shape == "tube" else np.zeros(N)
        modulus = np.pi * (depth**4 - inner**4) / (32.0 * depth)
    stress = load * arm / (4.0 * modulus)
    assert found.share == pytest.approx(np.std(stress) / np.mean(stress), rel=0.01)
    assert np.mean(stress) == pytest.approx(LOAD_N * setup.stress_per_newton_mpa, rel=1e-3)
