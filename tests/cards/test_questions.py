"""Slips are asked about with a suggestion and never converted; a good bench is asked nothing."""

from __future__ import annotations

import datetime as dt

import pytest

from daq.cards.cautions import approach_limit_mm_min, cautions
from daq.cards.load import example_path, load_frame, load_method, load_series
from daq.cards.questions import questions, series_slips, specimen_slips
from daq.cards.series import Specimen

A, B = "kiln-lane-a.toml", "kiln-lane-b.toml"
TODAY = dt.date(2026, 12, 1)


@pytest.fixture(scope="module")
def frame():
    return load_frame(example_path(A))


@pytest.fixture(scope="module")
def method():
    return load_method(example_path("alumina-bars.toml"))


def bar(width=(4.0, 4.0, 4.0), thickness=(3.0, 3.0, 3.0), **more) -> Specimen:
    return Specimen(number="B1", width_mm=width, thickness_mm=thickness, **more)


# --- nothing to ask ---

FITTING = [
    (A, "alumina-bars.toml", "quarter-40-20"),
    (A, "alumina-demo.toml", "quarter-40-20"),
    ("kiln-lane-demo.toml", "alumina-demo.toml", "quarter-40-20"),
    (A, "glass-bars.toml", "quarter-40-20"),
    (A, "dental-bars.toml", "three-14"),
    (B, "mortar-prisms.toml", "three-100"),
    (B, "graphite-bars.toml", "third-60-20"),
    ("kiln-lane-c.toml", "mortar-prisms.toml", "three-100"),
]


@pytest.mark.parametrize(("frame_name", "method_name", "fixture"), FITTING)
def test_the_examples_raise_no_question(frame_name, method_name, fixture):
    frame, method = load_frame(example_path(frame_name)), load_method(example_path(method_name))
    assert questions(frame, method, fixture=fixture) == ()


@pytest.mark.parametrize("name", ["alumina-series.toml", "demo-series.toml"])
def test_the_example_series_raise_no_question(frame, name):
    loaded = load_series(example_path(name))
    found = questions(frame, loaded.method, loaded.specimens, fixture=loaded.fixture, series=loaded.card)
    assert found == ()


# --- bars ---

BARS = [
    ("inch", bar((0.157, 0.157, 0.158)), ["width_mm"] * 3, "if it was inch, it is 3.988 mm", True),
    ("25.4 too large", bar((4.0, 101.6, 4.0)), ["width_mm"], "it is 4 mm", True),
    ("a tenth", bar(thickness=(3.0, 0.3, 3.0)), ["thickness_mm"], "if it was cm, it is 3 mm", True),
    ("ten times", bar(thickness=(3.0, 30.1, 3.0)), ["thickness_mm"], "it is 3.01 mm", True),
    ("metre", bar(thickness=(0.003, 3.0, 3.0)), ["thickness_mm"], "if it was m, it is 3 mm", True),
    ("micrometre", bar(thickness=(3000, 3.0, 3.0)), ["thickness_mm"], "if it was um, it is 3 mm", True),
    ("swapped", bar((3.0, 3.0, 3.0), (4.0, 4.0, 4.0)), ["width_mm"], "nominal 3 mm", True),
    ("spread", bar((4.0, 4.0, 4.021)), ["width_mm"], "measure again", False),
    ("tolerance", bar(thickness=(3.16, 3.16, 3.16)), ["thickness_mm"], "measure again", False),
    ("chamfer", bar(chamfer_mm=0.31), ["chamfer_mm"], "measure again", False),
    ("length", bar(length_mm=451.0), ["length_mm"], "if a decimal point is missing, it is 45.1 mm", False),
    ("readings", bar((4.0, 4.0)), ["width_mm"], "measure the bar", True),
]


@pytest.mark.parametrize(
    ("name", "specimen", "keys", "suggestion", "must"), BARS, ids=[case[0] for case in BARS]
)
def test_a_slip_of_a_bar(method, name, specimen, keys, suggestion, must):
    slips = tuple(specimen_slips(specimen, method))
    assert [slip.key for slip in slips] == [f"B1 {key}" for key in keys], slips
    assert all(suggestion in slip.suggestion or len(keys) > 1 for slip in slips), slips
    assert suggestion in slips[0].suggestion
    assert {slip.must_correct for slip in slips} == {must}


@pytest.mark.parametrize(
    "specimen",
    [
        bar((4.0, 4.0, 4.02)),
        bar(thickness=(3.149, 3.149, 3.149)),
        bar(chamfer_mm=0.3),
        bar(length_mm=200.0),
        bar((4.19, 4.19, 4.19)),
    ],
)
def test_the_edge_of_a_slip_is_not_asked(method, specimen):
    assert tuple(specimen_slips(specimen, method)) == ()


def test_half_a_percent_counts_for_a_thick_bar():
    """On a 40 mm prism 0.2 mm of scatter is within 0.5 %; the bound of 0.02 mm is for thin bars."""
    mortar = load_method(example_path("mortar-prisms.toml")).model_copy(update={"readings": 2})
    assert tuple(specimen_slips(bar((40.0, 40.2), (40.0, 40.0)), mortar)) == ()
    (slip,) = specimen_slips(bar((40.0, 40.21), (40.0, 40.0)), mortar)
    assert "scatter by 0.21 mm" in slip.text


def test_a_nearly_square_bar_is_never_called_swapped():
    mortar = load_method(example_path("mortar-prisms.toml"))
    assert tuple(specimen_slips(bar((40.1,), (39.9,)), mortar)) == ()


def test_a_rod_is_judged_by_its_diameter(method):
    rod = method.model_copy(
        update={"section": "circle", "diameter_mm": 5.0, "width_mm": None, "thickness_mm": None}
    )
    good = Specimen(number="R1", thickness_mm=(5.0, 5.0, 5.01))
    assert tuple(specimen_slips(good, rod)) == ()
    (slip,) = specimen_slips(Specimen(number="R1", thickness_mm=(5.0, 0.5, 5.0)), rod)
    assert "if it was cm, it is 5 mm" in slip.suggestion


# --- frame cards ---

FRAMES = [
    (
        "kN",
        A,
        [
            ("capacity_n = 1000.0", "capacity_n = 1.0"),
            ("verified_max_n = 1000.0", "verified_max_n = 1.0"),
            ("verified_min_n = 10.0", "verified_min_n = 0.01"),
            ("zero_balance_n = 2.4", "zero_balance_n = 0.0"),
            ("noise_quiet_n = 0.15", ""),
            *[(f"force_n = {n}00.0", f"force_n = 0.{n}") for n in range(1, 9)],
            *[("mass_on_cell_kg = 0.25", "")] * 3,
        ],
        ["cell.capacity_n", "channels[force].scale", "compliance.points[#9].deflection_um"],
        "if it is in kN, it is 1000 N",
        True,
    ),
    (
        "capacity in mN",
        A,
        [("capacity_n = 1000.0", "capacity_n = 10000000.0")],
        ["cell.capacity_n"],
        "if it is in mN, it is 10000 N",
        True,
    ),
    (
        "noise in mN",
        A,
        [("noise_quiet_n = 0.15", "noise_quiet_n = 150.0")],
        ["cell.noise_quiet_n"],
        "if it is in mN, it is 0.15 N",
        False,
    ),
    (
        "fraction",
        A,
        [("uncertainty_percent = 0.5", "uncertainty_percent = 0.005")],
        ["cell.uncertainty_percent"],
        "it is 0.5 %",
        False,
    ),
    (
        "lag in ms",
        A,
        [("time_constant_s = 0.0 ", "bandwidth_hz = 10.0\ntime_constant_s = 16.0 ")],
        ["cell.time_constant_s"],
        "correct time_constant_s",
        False,
    ),
    (
        "mass in g",
        A,
        [("moving_mass_kg = 4.0", "moving_mass_kg = 4000.0")],
        ["cell.moving_mass_kg"],
        "if it is in g, it is 4 kg",
        False,
    ),
    (
        "scale in mN",
        A,
        [("scale = 0.016", "scale = 16.0")],
        ["channels[force].scale"],
        "if it is in mN per count, it is 0.016 N per count",
        True,
    ),
    (
        "turned round twice",
        A,
        [("scale = 0.016", "sign = -1\nscale = -0.016")],
        ["channels[force].scale"],
        "push by hand",
        False,
    ),
    (
        "sign of the force",
        B,
        [("zero_balance_n = 11.0", "zero_balance_n = -11.0")],
        ["cell.zero_balance_n"],
        "is the sign of the force channel right?",
        False,
    ),
    (
        "piece on the cell",
        B,
        [("zero_balance_n = 11.0", "zero_balance_n = 150.0")],
        ["cell.zero_balance_n"],
        "forgotten piece",
        False,
    ),
    (
        "span in m",
        A,
        [
            ('geometry = "3-point"\nsupport_span_mm = 14.0', 'geometry = "3-point"\nsupport_span_mm = 0.014'),
            ("support_span_u_mm = 0.05", "support_span_u_mm = 0.0"),
            ("roller_diameter_mm = 2.0", "roller_diameter_mm = 0.002"),
        ],
        ["fixtures[three-14].support_span_mm"],
        "in m it is 14 mm",
        False,
    ),
    (
        "fixture in g",
        A,
        [("mass_on_cell_kg = 0.25", "mass_on_cell_kg = 250.0")],
        ["fixtures[quarter-40-20].mass_on_cell_kg"],
        "if it is in g, it is 0.25 kg",
        True,
    ),
    (
        "rating in kN",
        A,
        [("rating_n = 500.0", "rating_n = 0.5")],
        ["fixtures[three-14].rating_n"],
        "if it is in kN, it is 500 N",
        True,
    ),
    (
        "drive in mm/s",
        A,
        [
            ("speed_mm_min_max = 60.0", "speed_mm_min_max = 0.9"),
            ("speed_mm_min_min = 0.05", "speed_mm_min_min = 0.001"),
            ("approach_mm_min = 5.0", "approach_mm_min = 0.083"),
            ("return_mm_min = 20.0", "return_mm_min = 0.33"),
        ],
        ["motion.speed_mm_min_max", "motion.approach_mm_min"],
        "if it is in mm/s, it is 54 mm/min",
        False,
    ),
    (
        "approach in um/s",
        A,
        [
            ("approach_mm_min = 5.0", "approach_mm_min = 301.0"),
            ("speed_mm_min_max = 60.0", "speed_mm_min_max = 400.0"),
        ],
        ["motion.approach_mm_min"],
        "it is 18.06 mm/min",
        True,
    ),
    (
        "sign of the travel",
        A,
        [("travel_mm_max = 15.0", "travel_mm_max = -15.0")],
        ["motion.travel_mm_max"],
        "check the signs",
        False,
    ),
    (
        "compliance in mm",
        A,
        [(f"deflection_um = {n}0.0", f"deflection_um = 0.0{n}") for n in range(1, 9)],
        ["compliance.points[#9].deflection_um"],
        "if it is in mm, it is 80 um",
        True,
    ),
    (
        "compliance in nm",
        A,
        [(f"deflection_um = {n}0.0", f"deflection_um = {n}0000.0") for n in range(1, 9)],
        ["compliance.points[#9].deflection_um"],
        "if it is in nm, it is 80 um",
        True,
    ),
]


@pytest.mark.parametrize(
    ("name", "card", "edits", "keys", "part", "must"), FRAMES, ids=[case[0] for case in FRAMES]
)
def test_a_slip_of_a_frame_card(changed, method, name, card, edits, keys, part, must):
    frame = changed(card, *edits)
    found = [question for question in questions(frame, method) if question.file == f"frame card {frame.name}"]
    assert [question.key for question in found] == keys, found
    assert part in found[0].suggestion
    assert found[0].must_correct is must


def test_a_fixture_heavier_than_the_zero_hangs_below_the_crosshead(changed):
    """The same zero is right for a cell on the crosshead: the fixture pulls."""
    hanging = [
        ("zero_balance_n = 11.0", "zero_balance_n = -11.0"),
        ('position = "supports"', 'position = "crosshead"'),
    ]
    frame = changed(B, *hanging)
    assert questions(frame, load_method(example_path("mortar-prisms.toml")), fixture="three-100") == ()


# --- method cards ---

METHODS = [
    (
        "mm/s",
        A,
        "alumina-bars.toml",
        [("speed_mm_min = 0.5", "speed_mm_min = 0.00833")],
        "rate.speed_mm_min",
        "if it is in mm/s, it is 0.4998 mm/min",
    ),
    (
        "mm/h",
        A,
        "alumina-bars.toml",
        [("speed_mm_min = 0.5", "speed_mm_min = 30.0")],
        "rate.speed_mm_min",
        "if it is in mm/h, it is 0.5 mm/min",
    ),
    (
        "MPa/min",
        A,
        "glass-bars.toml",
        [("rate_mpa_s = 2.0", "rate_mpa_s = 120.0")],
        "rate.rate_mpa_s",
        "if it is in MPa/min, it is 2 MPa/s",
    ),
    (
        "psi/s",
        A,
        "glass-bars.toml",
        [("rate_mpa_s = 2.0", "rate_mpa_s = 290.0"), ("[20.0, 90.0]", "[30.0, 90.0]")],
        "rate.rate_mpa_s",
        "if it is in psi/s, it is 1.999 MPa/s",
    ),
    (
        "N/min",
        B,
        "mortar-prisms.toml",
        [("rate_n_s = 50.0", "rate_n_s = 3000.0")],
        "rate.rate_n_s",
        "if it is in N/min, it is 50 N/s",
    ),
    (
        "kN/s",
        B,
        "mortar-prisms.toml",
        [("rate_n_s = 50.0", "rate_n_s = 0.05")],
        "rate.rate_n_s",
        "if it is in kN/s, it is 50 N/s",
    ),
    (
        "no unit explains it",
        B,
        "mortar-prisms.toml",
        [("rate_n_s = 50.0", "rate_n_s = 500.0")],
        "rate.rate_n_s",
        "check rate, dimensions, span and expected strength",
    ),
    (
        "nearly psi",
        A,
        "alumina-bars.toml",
        [("modulus_gpa = 380.0", "modulus_gpa = 38.0"), ("strength_mpa = 383.0", "strength_mpa = 390.0")],
        "expected.strength_mpa",
        "if it is in psi, it is 2.689 MPa",
    ),
    (
        "GPa",
        A,
        "glass-bars.toml",
        [("strength_mpa = 90.0", "strength_mpa = 0.09"), ("rate_mpa_s = 2.0", "rate_mpa_s = 0.002")],
        "expected.strength_mpa",
        "if it is in GPa, it is 90 MPa",
    ),
    (
        "inch",
        A,
        "glass-bars.toml",
        [
            ("thickness_mm = 3.0", "thickness_mm = 0.118"),
            ("dimension_u_mm = 0.005", "dimension_u_mm = 0.0002"),
        ],
        "thickness_mm",
        "if it is in inch, it is 2.997 mm",
    ),
    (
        "chamfer",
        A,
        "alumina-bars.toml",
        [("chamfer_mm = 0.12", "chamfer_mm = 1.2")],
        "chamfer_mm",
        "0.12 mm was meant?",
    ),
    (
        "um",
        A,
        "alumina-bars.toml",
        [("dimension_u_mm = 0.005", "dimension_u_mm = 5.0")],
        "dimension_u_mm",
        "if it is in um, it is 0.005 mm",
    ),
    (
        "limit in kN",
        A,
        "alumina-bars.toml",
        [("[limits]", "[limits]\nforce_n_max = 0.8")],
        "limits.force_n_max",
        "if it is in kN, it is 800 N",
    ),
    (
        "fast seating",
        A,
        "glass-bars.toml",
        [("seating_mm_min = 0.2", "seating_mm_min = 5.1")],
        "preload.seating_mm_min",
        "at the test rate or slower",
    ),
]


@pytest.mark.parametrize(
    ("name", "frame_name", "card", "edits", "key", "part"), METHODS, ids=[case[0] for case in METHODS]
)
def test_a_slip_of_a_method_card(changed, name, frame_name, card, edits, key, part):
    method = changed(card, *edits)
    fixture = "three-100" if frame_name == B else "quarter-40-20"
    (question,) = questions(load_frame(example_path(frame_name)), method, fixture=fixture)
    assert question.file == f"method card {method.name}"
    assert question.key == key
    assert part in question.suggestion
    assert question.line.count("\n") == 0


# --- series cards ---


@pytest.mark.parametrize(
    ("changes", "key", "part"),
    [
        ({"temperature_c": 296.15}, "temperature_c", "if it is in kelvin, it is 23.0 degC"),
        ({"temperature_c": 73.4}, "temperature_c", "if it is in degrees Fahrenheit, it is 23.0 degC"),
        ({"humidity_percent": 0.45}, "humidity_percent", "if it is a fraction, it is 45 %"),
    ],
)
def test_a_slip_of_a_series_card(changes, key, part):
    card = load_series(example_path("demo-series.toml")).card.model_copy(update=changes)
    (slip,) = series_slips(card)
    assert slip.key == key
    assert part in slip.suggestion


# --- cautions ---


def test_a_good_bench_has_only_the_unsigned_clauses(frame, method):
    (line,) = cautions(frame, method, fixture="quarter-40-20", bars=30, today=TODAY)
    assert line == (
        "method alumina-bars: values not checked against the standard: "
        "rate.speed_mm_min, support_span_mm, chamfer_mm"
    )


def test_a_fixture_that_the_method_does_not_want_is_told(frame, changed):
    """Rollers of lane A are 4.5 mm and free."""
    card = changed("alumina-bars.toml", ("[limits]", "[needs]\nroller_diameter_mm = [2.0, 2.5]\n[limits]"))
    lines = cautions(frame, card, fixture="quarter-40-20", today=TODAY)
    assert lines[0].endswith("fixture quarter-40-20 are 4.5 mm, the method wants 2 to 2.5 mm")
    fixed = [fixture.model_copy(update={"rollers": "fixed"}) for fixture in frame.fixtures]
    stiff = frame.model_copy(update={"fixtures": tuple(fixed)})
    free = changed("alumina-bars.toml", ("[limits]", "[needs]\nrollers_free = true\n[limits]"))
    assert cautions(stiff, free, fixture="quarter-40-20", today=TODAY)[0].endswith("wants them free")


INPUT = '[[inputs]]\nname = "{}"\nsource = "reply"\nletter = "{}"\n'
CAUTIONS = [
    (
        "overdue",
        [("verified_due = 2046-01-15", "verified_due = 2026-11-30")],
        "overdue since 2026-11-30 (1 days)",
    ),
    ("no due day", [("verified_due = 2046-01-15", "")], "no verified_due in the card"),
    (
        "future",
        [("verified_on = 2026-01-15", "verified_on = 2027-01-15")],
        "verified_on 2027-01-15 lies in the future",
    ),
    ("lag", [("time_constant_s = 0.0 ", "# ")], "lag of the force chain not known"),
    ("noise", [("noise_quiet_n = 0.15", "# ")], "no quiet record"),
    ("position", [('role = "position"', 'role = "deflection"')], "a stop cannot be verified"),
    ("shield", [(INPUT.format("shield_open", "S"), "")], "the shield is not wired"),
    ("emergency stop", [(INPUT.format("emergency_stop", "E"), "")], "the emergency stop is not wired"),
    ("silence", [("simulated = true", "simulated = false")], "only after 0.5 s (usual: 0.05 s)"),
    ("approach", [("approach_mm_min = 5.0", "approach_mm_min = 10.0")], "clamped to 9.94 mm/min"),
]


@pytest.mark.parametrize(("name", "edits", "part"), CAUTIONS, ids=[case[0] for case in CAUTIONS])
def test_a_caution_of_a_frame_card(changed, name, edits, part):
    (line,) = cautions(changed(A, *edits), today=TODAY)
    assert part in line


def test_due_today_is_not_overdue(changed):
    assert cautions(changed(A, ("verified_due = 2046-01-15", "verified_due = 2026-12-01")), today=TODAY) == ()


def test_a_frame_without_watchdog_or_motion_says_so(changed):
    without = changed(
        A, ("[motion.keep_alive]\nsend =", "#"), ('reply = "OK K"\nevery_s = 0.1\nlapse_s = 0.5', "")
    )
    (line,) = cautions(without, today=TODAY)
    assert "does not stop if the computer dies" in line
    lines = cautions(load_frame(example_path("kiln-lane-c.toml")), today=TODAY)
    assert any("monitor only, midspan cannot stop this machine" in line for line in lines)


def test_cautions_of_a_method(frame, method, changed):
    mortar = load_method(example_path("mortar-prisms.toml"))
    lines = cautions(load_frame(example_path(B)), mortar, fixture="three-100", bars=4, today=TODAY)
    assert any("span over thickness is 2.5, outside 10 to 60" in line for line in lines)
    assert any(line == "4 bars: no Weibull statistics; 10 bars or more are usual" for line in lines)
    weak = method.model_copy(update={"expected": method.expected.model_copy(update={"strength_mpa": 8.0})})
    lines = cautions(frame, weak, fixture="three-40", bars=9, today=TODAY)
    assert any("is below the verified 10 N" in line for line in lines)
    assert any("no compliance table for fixture three-40" in line for line in lines)
    assert any("9 bars: a wide Weibull modulus" in line for line in lines)


def test_the_approach_limit_is_the_published_example(frame):
    """1 kN cell, 20 kN/mm, 150 ms, touch 3 N: 9.9 mm/min (worked example of the limit's derivation)."""
    assert frame.motion is not None
    assert approach_limit_mm_min(frame, frame.motion) == pytest.approx(9.94, abs=0.001)
