"""The drawing's beam against the mechanics it must agree with."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from daq.cards.load import example_path, load_frame, load_method, load_series
from daq.mechanics.deflection import load_point_deflection_mm, mid_deflection_mm
from daq.mechanics.sections import Rectangle, Spans
from daq.mechanics.stress import beam_stress_mpa
from monitor.beam import Beam, axis, beam_of, shape


def demo_beam(fixture: str = "quarter-40-20") -> Beam:
    series = load_series(example_path("demo-series.toml"))
    return beam_of(
        load_frame(example_path("kiln-lane-demo.toml")), series.method, series.specimens[0], fixture
    )


@pytest.mark.parametrize(("support_mm", "load_mm"), [(40.0, 20.0), (40.0, 0.0), (300.0, 100.0), (14.0, 3.0)])
def test_the_shape_agrees_with_the_deflection_formulae(support_mm: float, load_mm: float) -> None:
    beam = replace(demo_beam(), support_mm=support_mm, load_mm=load_mm)
    section, spans = Rectangle(4.0, 3.0), Spans(support_mm, load_mm)
    ratio = load_point_deflection_mm(1.0, 1e5, section, spans) / mid_deflection_mm(1.0, 1e5, section, spans)
    at = shape(beam, np.array([0.0, beam.arm_mm, support_mm / 2.0, support_mm - beam.arm_mm, support_mm]))
    assert at == pytest.approx([0.0, ratio, 1.0, ratio, 0.0], abs=1e-12)
    assert beam.mid_per_measured == pytest.approx(1.0 / ratio)


@pytest.mark.parametrize("load_mm", [0.0, 20.0])
def test_the_shape_is_what_a_beam_of_finite_differences_takes(load_mm: float) -> None:
    """v'' = M: integrated numerically from the moment alone."""
    beam = replace(demo_beam(), load_mm=load_mm)
    x = np.linspace(0.0, beam.support_mm, 4001)
    moment = np.minimum(np.minimum(x, beam.support_mm - x), beam.arm_mm)
    slope = np.cumsum(moment) * (x[1] - x[0])
    sag = np.cumsum(slope) * (x[1] - x[0])
    sag -= x / beam.support_mm * sag[-1]
    assert shape(beam, x) == pytest.approx(sag / sag[2000], abs=2e-3)


def test_the_bar_is_straight_beyond_its_supports_and_continuous() -> None:
    beam = demo_beam()
    places = np.array([-2.0, -1.0, 0.0, 1e-6])
    bent = shape(beam, places)
    assert bent[1] - bent[0] == pytest.approx(bent[2] - bent[1])
    assert axis(beam)[0] == pytest.approx(-beam.overhang_mm)


def test_the_expected_sag_agrees_with_the_beam_formula() -> None:
    """Stress and deflection of one force, from daq.mechanics, give the sag drawn at the expected median."""
    method = load_method(example_path("alumina-demo.toml"))
    beam = demo_beam()
    section, spans = Rectangle(beam.width_mm, beam.height_mm), Spans(40.0, 20.0)
    per_mpa = mid_deflection_mm(1.0, 1e3 * method.expected.modulus_gpa, section, spans) / beam_stress_mpa(
        1.0, section, spans
    )
    median_mpa = 383.0 / 0.958 * np.log(2.0) ** (1 / 12)  # Gamma(1 + 1/12) = 0.958 (tables)
    assert beam.sag_mm == pytest.approx(per_mpa * median_mpa, rel=2e-3)
    assert beam.exaggeration in (1, 2, 5, 10, 20, 50)


def test_a_break_is_told_from_the_left_end_and_judged_against_the_inner_span() -> None:
    beam = replace(demo_beam(), length_mm=50.0)
    assert beam.overhang_mm == 5.0
    assert beam.is_inner(25.0) and beam.is_inner(15.0) and not beam.is_inner(14.9)
    assert (
        beam.local_share(25.0) == 1.0
        and beam.local_share(10.0) == pytest.approx(0.5)
        and beam.local_share(4.0) == 0.0
    )


def test_three_rollers_have_one_load_and_no_inner_span() -> None:
    beam = demo_beam("three-40")
    assert beam.loads_mm == (20.0,) and beam.load_mm == 0.0
    assert beam.local_share(beam.from_left_end(20.0)) == 1.0
