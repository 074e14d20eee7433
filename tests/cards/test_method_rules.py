"""Every cross rule of a method card, and whether a method fits a frame; the expected lines are all."""

from __future__ import annotations

import json

import pytest

from daq.cards.load import check_fit, check_method, example_path, load_frame, load_method
from daq.cards.method import MethodCard
from daq.errors import CardError

ALUMINA, GLASS, MORTAR, GRAPHITE = (
    "alumina-bars.toml",
    "glass-bars.toml",
    "mortar-prisms.toml",
    "graphite-bars.toml",
)
SIZES = "width_mm = 4.0\nthickness_mm = 3.0"
ROUND = ('section = "rectangle"', 'section = "circle"')
TUBE = ('section = "rectangle"', 'section = "tube"')
NO_CHAMFER = ("chamfer_mm = 0.12", "")

RULES = [
    (
        "3-point with load span",
        MORTAR,
        [("support_span_mm = 100.0", "support_span_mm = 100.0\nload_span_mm = 50.0")],
        ["load_span_mm = 50.0|0 mm for geometry '3-point'"],
    ),
    (
        "quarter is half",
        ALUMINA,
        [("load_span_mm = 20.0", "load_span_mm = 13.0")],
        ["load_span_mm = 13.0|20 mm, the support span over 2"],
    ),
    (
        "third is a third",
        GRAPHITE,
        [("load_span_mm = 20.0", "load_span_mm = 30.0")],
        ["load_span_mm = 30.0|20 mm, the support span over 3"],
    ),
    (
        "load span not below the support span",
        ALUMINA,
        [('"4-point-quarter"', '"4-point"'), ("load_span_mm = 20.0", "load_span_mm = 40.0")],
        ["load_span_mm = 40.0|> 0 and less than support_span_mm = 40 mm"],
    ),
    (
        "free 4-point without load span",
        ALUMINA,
        [('"4-point-quarter"', '"4-point"'), ("load_span_mm = 20.0", "")],
        ["load_span_mm = (missing)|> 0"],
    ),
    (
        "width missing",
        ALUMINA,
        [("width_mm = 4.0", "")],
        ["width_mm = (missing)|the nominal size in mm for section 'rectangle'"],
    ),
    (
        "diameter of a rectangle",
        ALUMINA,
        [("width_mm = 4.0", "width_mm = 4.0\ndiameter_mm = 3.0")],
        ["diameter_mm = 3.0|not used"],
    ),
    (
        "sides of a circle",
        ALUMINA,
        [ROUND, NO_CHAMFER],
        [
            "width_mm = 4.0|not used",
            "thickness_mm = 3.0|not used",
            "diameter_mm = (missing)|the nominal size",
        ],
    ),
    (
        "bore of a circle",
        ALUMINA,
        [ROUND, NO_CHAMFER, (SIZES, "diameter_mm = 4.0\ninner_diameter_mm = 2.0")],
        ["inner_diameter_mm = 2.0|0 mm"],
    ),
    (
        "tube without bore",
        ALUMINA,
        [TUBE, NO_CHAMFER, (SIZES, "diameter_mm = 4.0")],
        ["inner_diameter_mm = (missing)|> 0 and less"],
    ),
    (
        "bore as large as the tube",
        ALUMINA,
        [TUBE, NO_CHAMFER, (SIZES, "diameter_mm = 4.0\ninner_diameter_mm = 4.0")],
        ["inner_diameter_mm = 4.0"],
    ),
    (
        "chamfer of a circle",
        ALUMINA,
        [ROUND, (SIZES, "diameter_mm = 4.0")],
        ["chamfer_mm = 0.12|0 mm for section 'circle'"],
    ),
    (
        "chamfer as large as the side",
        ALUMINA,
        [("chamfer_mm = 0.12", "chamfer_mm = 1.5")],
        ["chamfer_mm = 1.5|less than 1.5 mm"],
    ),
    (
        "a block, not a beam",
        ALUMINA,
        [("thickness_mm = 3.0", "thickness_mm = 30.0")],
        ["thickness_mm = 30.0|at most 20 mm, half the support span"],
    ),
    (
        "crosshead without speed",
        ALUMINA,
        [("speed_mm_min = 0.5", "")],
        ["rate.speed_mm_min = (missing)|mode 'crosshead'", "preload.seating_mm_min|add"],
    ),
    (
        "force without rate",
        MORTAR,
        [("rate_n_s = 50.0", "")],
        ["rate.rate_n_s = (missing)|the number of mode 'force'"],
    ),
    (
        "stress without rate",
        GLASS,
        [("rate_mpa_s = 2.0", "")],
        ["rate.rate_mpa_s = (missing)|the number of mode 'stress'"],
    ),
    (
        "two rates",
        MORTAR,
        [("rate_n_s = 50.0", "rate_n_s = 50.0\nrate_mpa_s = 1.0")],
        ["rate.rate_mpa_s = 1.0|not used in mode 'force'"],
    ),
    (
        "rate of a crosshead method",
        ALUMINA,
        [("speed_mm_min = 0.5", "speed_mm_min = 0.5\nrate_n_s = 1.0")],
        ["rate.rate_n_s = 1.0|not used"],
    ),
    (
        "loop of a crosshead method",
        ALUMINA,
        [("speed_mm_min = 0.5", 'speed_mm_min = 0.5\nloop = "midspan"')],
        ["rate.loop = 'midspan'|'frame'"],
    ),
    (
        "loop without first speed",
        GLASS,
        [('loop = "frame"', 'loop = "midspan"')],
        ["rate.speed_mm_min = (missing)|first speed"],
    ),
    (
        "seating without speed",
        GLASS,
        [("seating_mm_min = 0.2", "")],
        ["preload.seating_mm_min = (missing)|a speed > 0 mm/min"],
    ),
    (
        "strength in psi",
        ALUMINA,
        [("strength_mpa = 383.0", "strength_mpa = 55549.0")],
        [
            "expected.strength_mpa = 55549.0|at most 19000 MPa, a twentieth of modulus_gpa = 380 GPa: "
            "correct the unit (if this is psi, it is 383 MPa)"
        ],
    ),
    (
        "band upside down",
        ALUMINA,
        [("[5.0, 60.0]", "[60.0, 5.0]")],
        ["time_to_break_s[#2] = 5.0|more than the shortest time of 60 s"],
    ),
    (
        "run shorter than the band",
        ALUMINA,
        [("run_s_max = 120.0", "run_s_max = 59.0")],
        ["limits.run_s_max = 59|at least 60 s"],
    ),
    (
        "threshold above lasting drop",
        ALUMINA,
        [("[limits]", "[fracture]\nthreshold_percent = 20.0\n[limits]")],
        ["fracture.threshold_percent = 20.0|less than lasting_percent = 20 %"],
    ),
    (
        "break above lasting drop",
        ALUMINA,
        [("[limits]", "[fracture]\nbreak_percent = 20.0\n[limits]")],
        ["fracture.break_percent = 20|more than"],
    ),
    (
        "clause of no key",
        ALUMINA,
        [('key = "chamfer_mm"', 'key = "rate.chamfer_mm"')],
        ["clauses[#3].key = 'rate.chamfer_mm'|dotted key"],
    ),
    (
        "checked without a name",
        ALUMINA,
        [
            (
                'key = "chamfer_mm"\nstandard = "ASTM C1161"\nmark = "from memory"',
                'key = "chamfer_mm"\nstandard = "X"\nmark = "checked"',
            )
        ],
        ["clauses[#3].checked_by = (missing)|needed", "clauses[#3].checked_on = (missing)|needed"],
    ),
    (
        "no day of the calendar",
        ALUMINA,
        [('key = "chamfer_mm"', 'checked_on = "2026-02-30"\nkey = "chamfer_mm"')],
        ["clauses[#3].checked_on = '2026-02-30'|a day of the calendar"],
    ),
    (
        "clause of no standard",
        ALUMINA,
        [('key = "chamfer_mm"\nstandard = "ASTM C1161"', 'key = "chamfer_mm"')],
        ["clauses[#3].standard = (missing)|the designation of a standard"],
    ),
    (
        "window the wrong way round",
        ALUMINA,
        [("[limits]", "[validity]\nstrain_rate_per_s = [2e-4, 5e-5]\n[limits]")],
        ["validity.strain_rate_per_s[#2] = 5e-05|more than the lower end of 0.0002"],
    ),
    (
        "band of another mode",
        ALUMINA,
        [("[rate]", "[rate]\nband_n_s = [40.0, 60.0]")],
        ["rate.band_n_s = (a list of 2)|left out in mode 'crosshead': use speed_band_mm_min"],
    ),
    (
        "rate outside its own band",
        ALUMINA,
        [("[rate]", "[rate]\nspeed_band_mm_min = [0.1, 0.3]")],
        ["rate.speed_mm_min = 0.5|from 0.1 to 0.3"],
    ),
    (
        "load span of a 3-point bar",
        MORTAR,
        [("[limits]", '[validity.break_place]\nregion = "load span"\n[limits]')],
        ["validity.break_place.region = 'load span'|'anywhere'"],
    ),
    (
        "stress at the break of a tile",
        MORTAR,
        [("[limits]", '[validity.break_place]\nnear_stress = "at the break"\n[limits]')],
        ["validity.break_place.near_stress = 'at the break'|'nominal'"],
    ),
    (
        "sizes of another section",
        ALUMINA,
        [("[limits]", '[measuring]\ndimensions = ["width", "diameter"]\n[limits]')],
        ["measuring.dimensions[#2] = 'diameter'|a size that a bar of section 'rectangle' has"],
    ),
    (
        "two ways of rounding",
        ALUMINA,
        [("[limits]", "[rounding]\nstress_step_mpa = 0.1\nstress_digits = 3\n[limits]")],
        ["rounding.stress_digits = 3|left out where stress_step_mpa is given"],
    ),
]


@pytest.mark.parametrize(("name", "card", "edits", "expected"), RULES, ids=[rule[0] for rule in RULES])
def test_one_change_gives_exactly_these_faults(problems, name, card, edits, expected):
    lines = problems(card, *edits)
    assert len(lines) == len(expected), lines
    for line, wanted in zip(lines, expected, strict=True):
        start, _, part = wanted.partition("|")
        assert line.startswith(start), line
        assert part in line, line


METHODS = sorted(
    path.name for path in example_path(ALUMINA).parent.glob("*.toml") if 'card = "method"' in path.read_text()
)


@pytest.mark.parametrize("card", METHODS)
def test_the_example_methods_have_no_fault(problems, card):
    assert len(METHODS) == 6
    assert problems(card) == ()


ALLOWED = [
    (
        GRAPHITE,
        [
            ("support_span_mm = 60.0", "support_span_mm = 100.0"),
            ("load_span_mm = 20.0", "load_span_mm = 33.333"),
        ],
    ),
    (ALUMINA, [("run_s_max = 120.0", "run_s_max = 60.0")]),
    (ALUMINA, [("thickness_mm = 3.0", "thickness_mm = 20.0")]),
    (ALUMINA, [TUBE, NO_CHAMFER, (SIZES, "diameter_mm = 4.0\ninner_diameter_mm = 2.0")]),
    (GLASS, [('loop = "frame"', 'loop = "midspan"\nspeed_mm_min = 0.3')]),
    (ALUMINA, [('key = "chamfer_mm"', 'checked_on = "2026-02-28"\nkey = "chamfer_mm"')]),
    (ALUMINA, [("[rate]", "[rate]\nspeed_band_mm_min = [0.5, 1.5]")]),
    (
        ALUMINA,
        [
            ('key = "chamfer_mm"\nstandard = "ASTM C1161"', 'key = "chamfer_mm"'),
            ("name =", 'standard = "X"\nname ='),
        ],
    ),
    (ALUMINA, [("[limits]", "[needs]\nroller_diameter_mm = [4.5, 4.5]\n[limits]")]),
    (
        ALUMINA,
        [
            (
                "[limits]",
                '[validity.break_place]\nregion = "load span"\nnear_stress = "at the break"\n[limits]',
            )
        ],
    ),
]


@pytest.mark.parametrize(("card", "edits"), ALLOWED)
def test_the_edge_of_a_rule_is_allowed(problems, card, edits):
    assert problems(card, *edits) == ()


def test_rules_also_hold_for_a_card_without_a_file():
    card = load_method(example_path(ALUMINA))
    resolved = card.model_dump(mode="json") | {"load_span_mm": 13.0}
    with pytest.raises(CardError, match=r"^method card: load_span_mm = 13.0: 20 mm"):
        check_method(MethodCard.model_validate_json(json.dumps(resolved)))


# --- does it fit the frame? ---

FIT = [
    ("alumina on lane a", "kiln-lane-a.toml", ALUMINA, [], [], "quarter-40-20", []),
    ("dental on lane a", "kiln-lane-a.toml", "dental-bars.toml", [], [], "three-14", []),
    ("glass on lane a", "kiln-lane-a.toml", GLASS, [], [], "quarter-40-20", []),
    ("mortar on lane b", "kiln-lane-b.toml", MORTAR, [], [], "three-100", []),
    ("graphite on lane b", "kiln-lane-b.toml", GRAPHITE, [], [], "third-60-20", []),
    ("mortar on lane c", "kiln-lane-c.toml", MORTAR, [], [], "three-100", []),
    ("fixture unknown", "kiln-lane-a.toml", ALUMINA, [], [], "half", ["fixture = 'half'|one of quarter"]),
    (
        "3-point fixture for a 4-point method",
        "kiln-lane-a.toml",
        ALUMINA,
        [],
        [],
        "three-40",
        ["geometry = '4-point-quarter'|because fixture three-40 is fitted: fit the fixture quarter-40-20"],
    ),
    (
        "span not of the fixture",
        "kiln-lane-a.toml",
        ALUMINA,
        [],
        [("span_mm = 40.0", "span_mm = 80.0"), ("load_span_mm = 20.0", "load_span_mm = 40.0")],
        "quarter-40-20",
        ["support_span_mm = 80.0|40 mm within 1 %", "load_span_mm = 40.0|20 mm within 1 %"],
    ),
    ("measured span", "kiln-lane-a.toml", ALUMINA, [("_mm = 40.0", "_mm = 40.35")], [], "quarter-40-20", []),
    (
        "force limit above the cell's",
        "kiln-lane-a.toml",
        ALUMINA,
        [],
        [("[limits]", "[limits]\nforce_n_max = 901.0")],
        "quarter-40-20",
        ["limits.force_n_max = 901.0|at most 900 N, 90 % of the cell's capacity"],
    ),
    (
        "force limit above the fixture's",
        "kiln-lane-a.toml",
        ALUMINA,
        [("rating_n = 2000.0", "rating_n = 800.0")],
        [("[limits]", "[limits]\nforce_n_max = 721.0")],
        "quarter-40-20",
        ["limits.force_n_max = 721.0|at most 720 N, 90 % of the rating of quarter-40-20"],
    ),
    (
        "bars too strong for the cell",
        "kiln-lane-a.toml",
        ALUMINA,
        [],
        [("strength_mpa = 383.0", "strength_mpa = 750.0")],
        "quarter-40-20",
        ["expected.strength_mpa = 750.0|below 900 N, 90 % of the cell's capacity (expected 910.9 N)"],
    ),
    (
        "speed outside the drive",
        "kiln-lane-a.toml",
        ALUMINA,
        [],
        [("speed_mm_min = 0.5", "speed_mm_min = 0.00833")],
        "quarter-40-20",
        ["rate.speed_mm_min = 0.00833|from 0.05 to 60 mm/min"],
    ),
    (
        "seating outside the drive",
        "kiln-lane-a.toml",
        GLASS,
        [],
        [("seating_mm_min = 0.2", "seating_mm_min = 0.01")],
        "quarter-40-20",
        ["preload.seating_mm_min = 0.01|from 0.05 to 60"],
    ),
    (
        "no force loop in the machine",
        "kiln-lane-a.toml",
        GLASS,
        [("[motion.force_rate]\nsend =", "#"), ('reply = "OK F"\ntimeout_s = 0.3', "")],
        [],
        "quarter-40-20",
        ["rate.loop = 'frame'|'midspan' on frame kiln-lane-a"],
    ),
    (
        "no deflection sensor",
        "kiln-lane-a.toml",
        ALUMINA,
        [],
        [('modulus = "crosshead"', 'modulus = "deflection"')],
        "quarter-40-20",
        ["modulus = 'deflection'|no channel of role 'deflection'"],
    ),
    (
        "travel limit beyond the travel",
        "kiln-lane-a.toml",
        ALUMINA,
        [],
        [("[limits]", "[limits]\ntravel_mm_max = 46.0")],
        "quarter-40-20",
        ["limits.travel_mm_max = 46.0|at most 45 mm"],
    ),
    (
        "no displacement sensor at all",
        "kiln-lane-a.toml",
        ALUMINA,
        [('role = "position"\nunit = "mm"', 'role = "other"\nunit = "mm"')],
        [('modulus = "crosshead"', 'modulus = "no"')],
        "quarter-40-20",
        ["limits.force_only_allowed = false|true on frame kiln-lane-a"],
    ),
    (
        "a stress rate that the drive cannot hold",
        "kiln-lane-a.toml",
        GLASS,
        [],
        [("rate_mpa_s = 2.0", "rate_mpa_s = 2000.0")],
        "quarter-40-20",
        ["rate.rate_mpa_s = 2000.0|within 0.05 to 60 mm/min of frame kiln-lane-a (2400 N/s / "],
    ),
    (
        "no displacement sensor, allowed",
        "kiln-lane-a.toml",
        ALUMINA,
        [('role = "position"\nunit = "mm"', 'role = "other"\nunit = "mm"')],
        [('modulus = "crosshead"', 'modulus = "no"'), ("[limits]", "[limits]\nforce_only_allowed = true")],
        "quarter-40-20",
        [],
    ),
]  # fmt: skip


@pytest.mark.parametrize(
    ("name", "frame", "method", "frame_edits", "method_edits", "fixture", "expected"),
    FIT,
    ids=[case[0] for case in FIT],
)
def test_fit_of_method_and_frame(changed, name, frame, method, frame_edits, method_edits, fixture, expected):
    frame_card, method_card = changed(frame, *frame_edits), changed(method, *method_edits)
    try:
        check_fit(frame_card, method_card, fixture, "m")
        lines = ()
    except CardError as error:
        lines = error.problems
    assert len(lines) == len(expected), lines
    for line, wanted in zip(lines, expected, strict=True):
        start, _, part = wanted.partition("|")
        assert line.startswith(f"m: {start}"), line
        assert part in line, line


def test_a_fixture_within_one_percent_is_measured_not_typed():
    frame, method = load_frame(example_path("kiln-lane-a.toml")), load_method(example_path(ALUMINA))
    check_fit(frame, method.model_copy(update={"support_span_mm": 40.3}), "quarter-40-20")
    with pytest.raises(CardError):
        check_fit(frame, method.model_copy(update={"support_span_mm": 40.5}), "quarter-40-20")
