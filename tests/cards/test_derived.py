"""What follows from a card, against numbers worked out elsewhere: beam formulae, baud arithmetic, plans."""

from __future__ import annotations

import math

import numpy as np
import pytest

from daq.cards import derived
from daq.cards.frame import StatusInput
from daq.cards.load import example_path, load_frame, load_method, load_series
from daq.cards.series import Specimen


@pytest.fixture(scope="module")
def frames():
    return {name: load_frame(example_path(f"kiln-lane-{name}.toml")) for name in ("a", "b", "c")}


@pytest.fixture(scope="module")
def alumina():
    return load_method(example_path("alumina-bars.toml"))


def test_columns_follow_the_order_of_the_card(frames):
    frame = frames["a"]
    assert [channel.name for channel in derived.channels_of(frame, 0)] == ["force", "crosshead"]
    turned = frame.model_copy(update={"channels": tuple(reversed(frame.channels))})
    assert [channel.name for channel in derived.channels_of(turned, 0)] == ["crosshead", "force"]
    assert derived.block_column(turned, derived.force_channel(turned)) == (0, 1)


def test_links_are_found_by_name(frames):
    assert derived.link_number(frames["c"], "indicator") == 0
    with pytest.raises(KeyError):
        derived.link_number(frames["c"], "main")
    assert derived.motion_link(frames["a"]) == 0
    assert derived.motion_link(frames["c"]) is None


def test_an_input_belongs_to_the_motion_link_unless_it_says_so(frames):
    frame = frames["a"]
    second = frame.links[0].model_copy(update={"name": "second"})
    two = frame.model_copy(update={"links": (second, *frame.links)})
    assert derived.input_link(two, frame.inputs[0]) == 1
    named = StatusInput(name="shield_open", source="modem", line="cts", link="second")
    assert derived.input_link(two, named) == 0
    assert derived.input_link(two.model_copy(update={"motion": None}), frame.inputs[0]) == 0


@pytest.mark.parametrize(("rate_hz", "expected"), [(1000.0, 0.05), (60.0, 0.05), (10.0, 0.3), (59.0, 3 / 59)])
def test_silence_is_three_periods_or_fifty_milliseconds(frames, rate_hz, expected):
    link = frames["c"].links[0].model_copy(update={"rate_hz": rate_hz})
    assert derived.silence_s(link) == pytest.approx(expected, rel=1e-12)
    assert derived.silence_s(link.model_copy(update={"silence_s": 0.5})) == 0.5


def test_the_row_of_lane_a_is_what_its_comment_says(frames):
    """D65535,-75000,-500000,FF and line end, written out."""
    frame = frames["a"]
    link = frame.links[0]
    assert derived.link_bytes_per_row(link, frame) == len("D65535,-75000,-500000,FF\r\n") == 26
    assert derived.row_bits_per_s(link, frame) == 260_000.0
    assert derived.row_duration_s(link, frame) == pytest.approx(260 / 460_800, rel=1e-12)


def test_unused_columns_are_counted_with_a_guess(frames):
    frame = frames["a"]
    link = frame.links[0]
    wide = link.model_copy(update={"lines": link.lines.model_copy(update={"columns": 4})})
    assert derived.link_bytes_per_row(wide, frame) == 26 + len(",12345678")
    assert (
        derived.link_bytes_per_row(
            link.model_copy(update={"lines": wide.lines.model_copy(update={"columns": 3})}), frame
        )
        == 26
    )


def test_the_packet_of_lane_b_is_what_its_comment_says(frames):
    import struct

    frame = frames["b"]
    body = struct.calcsize("<HiB") + 3
    assert derived.link_bytes_per_row(frame.links[0], frame) == 2 + body + 2 == 14
    assert derived.row_duration_s(frame.links[0], frame) == 0.0


def test_a_labelled_row_counts_label_and_separator(frames):
    frame = frames["c"]
    assert derived.link_bytes_per_row(frame.links[0], frame) == len("F=12345678\r\n")


@pytest.mark.parametrize(
    ("changes", "bits"),
    [({}, 10), ({"parity": "even"}, 11), ({"parity": "odd", "stop_bits": 2}, 12), ({"data_bits": 7}, 9)],
)
def test_bits_of_a_byte(frames, changes, bits):
    assert derived.byte_bits(frames["a"].links[0].model_copy(update=changes)) == bits


def test_status_columns_count_once_and_shared_ones_not_at_all(frames):
    frame = frames["a"]
    link = frame.links[0]
    inputs = (
        StatusInput(name="shield_open", source="column", column=4, bit=0),
        StatusInput(name="emergency_stop", source="column", column=4, bit=1),
        StatusInput(name="moving", source="column", column=2),
    )
    with_inputs = frame.model_copy(update={"inputs": inputs})
    assert [item.name for item in derived.column_inputs(with_inputs, link)] == ["shield_open"]
    assert derived.link_bytes_per_row(link, with_inputs) == 26 + len(",1")


def test_calibration_and_its_inverse(frames):
    force = derived.force_channel(frames["a"])
    assert derived.value_of(force, 1000.0) == pytest.approx(16.0, rel=1e-12)
    turned = force.model_copy(update={"sign": -1, "offset": 3.0})
    assert derived.value_of(turned, 1000.0) == pytest.approx(-19.0, rel=1e-12)
    for counts in (-75_000.0, 0.0, 1.0, 12_345.0):
        assert derived.counts_of(turned, derived.value_of(turned, counts)) == pytest.approx(counts, abs=1e-6)


def test_fixtures_and_spans(frames, alumina):
    frame = frames["a"]
    assert derived.spans_of(derived.fixture_by_name(frame, "quarter-40-20")) == derived.Spans(40.0, 20.0)
    assert derived.spans_of(derived.fixture_by_name(frame, "three-40")) == derived.Spans(40.0, 0.0)
    with pytest.raises(KeyError):
        derived.fixture_by_name(frame, "none")
    assert derived.geometry_of(alumina) == derived.Spans(40.0, 20.0)
    assert derived.geometry_of(alumina).arm_mm == 10.0
    graphite = load_method(example_path("graphite-bars.toml"))
    assert derived.geometry_of(graphite).load_mm == pytest.approx(20.0, rel=1e-12)
    free = alumina.model_copy(update={"geometry": "4-point", "load_span_mm": 17.0})
    assert derived.geometry_of(free) == derived.Spans(40.0, 17.0)


def test_compliance_holds_for_its_own_fixture_and_cell(frames):
    frame = frames["a"]
    assert derived.compliance_for(frame, "quarter-40-20") is frame.compliance
    assert derived.compliance_for(frame, "three-40") is None
    swapped = frame.model_copy(update={"cell": frame.cell.model_copy(update={"serial": "X"})})
    assert derived.compliance_for(swapped, "quarter-40-20") is None


@pytest.mark.parametrize(
    ("stress", "size", "spans", "load"),
    [
        # 3FL/(2bh^2), 3F(L-Li)/(2bh^2), FL/(bh^2), 8FL/(pi d^3), 8FLD/(pi(D^4-d^4)): textbook, exact
        (166.66666666666666, ("rectangle", 4, 3), (40, 0), 100),
        (83.33333333333333, ("rectangle", 4, 3), (40, 20), 100),
        (1.875, ("rectangle", 40, 40), (120, 40), 1000),
        (7.03125, ("rectangle", 40, 40), (100, 0), 3000),
        (101.8591636, ("circle", 5, 5), (50, 0), 100),
        (292.5642336, ("tube", 10, 10, 6), (100, 0), 1000),
    ],
)
def test_load_for_a_stress(stress, size, spans, load):
    found = derived.load_for_stress_n(stress, derived.SectionSize(*size), derived.Spans(*spans))
    assert found == pytest.approx(load, rel=1e-8)


@pytest.mark.parametrize(("spans", "stiffness"), [((40, 0), 2025.0), ((40, 20), 4050.0)])
def test_bar_stiffness(spans, stiffness):
    """E 300 GPa, 4 x 3: published 2025 and 4050 N/mm."""
    size = derived.SectionSize("rectangle", 4, 3)
    assert derived.bar_stiffness_n_mm(300.0, size, derived.Spans(*spans)) == pytest.approx(
        stiffness, rel=1e-12
    )


def test_the_median_is_the_median_of_drawn_strengths(alumina):
    rng = np.random.default_rng(5)
    m, mean = alumina.expected.weibull_modulus, alumina.expected.strength_mpa
    drawn = mean / math.gamma(1 + 1 / m) * rng.weibull(m, 200_000)
    assert drawn.mean() == pytest.approx(mean, rel=1e-3)
    assert derived.median_strength_mpa(alumina) == pytest.approx(float(np.median(drawn)), rel=1e-3)


@pytest.mark.parametrize(
    ("method", "fixture", "frame", "load"),
    [
        ("alumina-bars", "quarter-40-20", "a", 460.0),
        ("glass-bars", "quarter-40-20", "a", 108.0),
        ("dental-bars", "three-14", "a", 104.0),
        ("mortar-prisms", "three-100", "b", 2987.0),
        ("graphite-bars", "third-60-20", "b", 750.0),
    ],
)
def test_expected_loads_of_the_examples(frames, method, fixture, frame, load):
    """Worked plans of such bars; these are mean loads, the median lies 1 to 2 % higher."""
    spans = derived.spans_of(derived.fixture_by_name(frames[frame], fixture))
    found = derived.median_load_n(load_method(example_path(f"{method}.toml")), spans)
    assert load < found < 1.025 * load


def test_demo_bars_break_three_to_five_seconds_after_contact(frames):
    """P5 to P99 of the expected strength at 2 mm/min, frame and bar in series."""
    loaded = load_series(example_path("demo-series.toml"))
    method, spans = loaded.method, derived.geometry_of(loaded.method)
    assert method.rate.speed_mm_min is not None
    m = method.expected.weibull_modulus
    scale = method.expected.strength_mpa / math.gamma(1 + 1 / m)
    for probability in (0.05, 0.5, 0.99):
        strength = scale * (-math.log(1 - probability)) ** (1 / m)
        load_n = derived.load_for_stress_n(strength, derived.nominal_section(method), spans)
        bar = derived.bar_stiffness_n_mm(method.expected.modulus_gpa, derived.nominal_section(method), spans)
        frame = derived.frame_stiffness_n_mm(frames["a"], loaded.fixture)
        time_s = (load_n / bar + load_n / frame) / (method.rate.speed_mm_min / 60.0)
        assert 3.0 <= time_s <= 5.0


def test_sections_of_bars(alumina):
    bar = Specimen(number="B", width_mm=(4.0, 4.1, 4.2), thickness_mm=(3.0, 3.0, 3.3))
    size = derived.section_of(bar, alumina)
    assert (size.width_mm, size.thickness_mm) == pytest.approx((4.1, 3.1), rel=1e-12)
    assert size.chamfer_mm == 0.12
    assert derived.section_of(bar.model_copy(update={"chamfer_mm": 0.0}), alumina).chamfer_mm == 0.0
    tube = alumina.model_copy(update={"section": "tube", "diameter_mm": 5.0, "inner_diameter_mm": 3.0})
    ring = Specimen(number="T", thickness_mm=(5.0, 5.2), inner_diameter_mm=3.0)
    size = derived.section_of(ring, tube)
    assert (size.width_mm, size.thickness_mm, size.inner_diameter_mm) == pytest.approx((5.1, 5.1, 3.0))
    assert derived.nominal_section(tube).modulus_mm3 == pytest.approx(
        math.pi * (5**4 - 3**4) / 160, rel=1e-12
    )
    rod = tube.model_copy(update={"section": "circle"})
    assert derived.section_of(ring, rod).inner_diameter_mm == 0.0
    assert derived.nominal_section(rod).modulus_mm3 == pytest.approx(math.pi * 125 / 32, rel=1e-12)


def test_the_working_limit_is_the_weaker_of_cell_and_fixture(frames):
    frame = frames["a"]
    assert derived.working_limit_n(frame, derived.fixture_by_name(frame, "quarter-40-20")) == 900.0
    assert derived.working_limit_n(frame, derived.fixture_by_name(frame, "three-14")) == 450.0


def test_frame_stiffness_from_table_drive_or_nothing(frames):
    assert derived.frame_stiffness_n_mm(frames["a"], "quarter-40-20") == pytest.approx(10_000.0)
    assert derived.frame_stiffness_n_mm(frames["a"], "three-40") == 20_000.0
    assert derived.frame_stiffness_n_mm(frames["c"], "three-100") == math.inf
