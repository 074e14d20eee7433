"""From a file to a card: unreadable files, wrong kinds, field faults in one line each, all at once."""

from __future__ import annotations

import os
import re
from pathlib import Path

import pytest

from daq.cards.frame import FrameCard
from daq.cards.load import (
    check_frame,
    example_path,
    examples_folder,
    load_frame,
    load_method,
    load_series,
)
from daq.errors import CardError

A = "kiln-lane-a.toml"
COMPLETE_LINE = re.compile(r"^[^\n]+?: [^\n]+? = [^\n]+: [^\n]+: [^\n]+$")


def faults(load, path) -> tuple[str, ...]:
    with pytest.raises(CardError) as caught:
        load(path)
    assert all(COMPLETE_LINE.match(line) for line in caught.value.problems), caught.value.problems
    return tuple(line.removeprefix(f"{path}: ") for line in caught.value.problems)


def written(tmp_path: Path, data: bytes | str, name: str = "card.toml") -> Path:
    path = tmp_path / name
    path.write_bytes(data if isinstance(data, bytes) else data.encode("utf-8"))
    return path


# --- files ---


def test_a_missing_file(tmp_path):
    (line,) = faults(load_frame, tmp_path / "none.toml")
    assert line.startswith("file = cannot be read (No such file or directory)")


def test_a_folder(tmp_path):
    (line,) = faults(load_frame, tmp_path)
    assert "Is a directory" in line


def test_a_pipe_is_not_waited_for(tmp_path):
    os.mkfifo(tmp_path / "pipe")
    (line,) = faults(load_frame, tmp_path / "pipe")
    assert line.startswith("file = not a regular file")


def test_a_name_that_no_system_takes():
    (line,) = faults(load_frame, "a\0b")
    assert "not a usable file name" in line


def test_a_file_that_is_too_large(tmp_path):
    (line,) = faults(load_frame, written(tmp_path, b"# " + b"x\n# " * 70_000))
    assert "at most 256 KiB" in line


def test_a_file_of_the_largest_size_is_read(tmp_path):
    text = example_path(A).read_bytes()
    padding = b"#" * 1023 + b"\n"
    size = 256 * 1024
    data = text + padding * ((size - len(text)) // len(padding))
    assert load_frame(written(tmp_path, data + b"\n" * (size - len(data)))).name == "kiln-lane-a"


def test_a_file_that_is_not_utf8(tmp_path):
    (line,) = faults(load_frame, written(tmp_path, 'title = "Prüfung"'.encode("latin-1")))
    assert line.startswith("file = byte 0xfc at position 11 is not UTF-8: UTF-8 text")


def test_a_byte_order_mark_is_no_fault(tmp_path):
    assert load_frame(written(tmp_path, b"\xef\xbb\xbf" + example_path(A).read_bytes())).name == "kiln-lane-a"


@pytest.mark.parametrize(
    ("text", "part"),
    [
        ("capacity_n = 1,5", "(at line 1, column "),
        ("a = [", "TOML text"),
        ("a = " + "[" * 4000, "file = not readable: TOML text"),
        ("x = 1\nx = 2", "Cannot overwrite a value"),
        ("a = '" + "y" * 4096 + "'", "file = a line of 4102 characters: at most 4096 characters a line"),
        ("a = 1979-05-32", "(at line 1, column 9): TOML text"),
    ],
    ids=["comma", "open", "deep", "twice", "long", "day"],
)
def test_text_that_is_not_toml(tmp_path, text, part):
    (line,) = faults(load_frame, written(tmp_path, text))
    assert part in line


def test_the_deepest_card_that_is_read(tmp_path):
    (line,) = faults(load_frame, written(tmp_path, 'card = "frame"\na' + ".a" * 8 + " = 1"))
    assert "at most 8 tables or lists inside each other" in line
    (line,) = faults(load_frame, written(tmp_path, "a" + ".a" * 40 + " = 1"))
    assert "nested too deeply" in line
    lines = faults(load_frame, written(tmp_path, 'card = "frame"\na' + ".a" * 7 + " = 1"))
    assert any(line.startswith("a = (a table): not a key") for line in lines)


# --- kinds ---


@pytest.mark.parametrize(
    ("load", "name", "line"),
    [
        (
            load_frame,
            "alumina-bars.toml",
            "card = 'method': 'frame', because a frame card is wanted here: choose a frame card",
        ),
        (
            load_method,
            A,
            "card = 'frame': 'method', because a method card is wanted here: choose a method card",
        ),
        (
            load_series,
            A,
            "card = 'frame': 'series', because a series card is wanted here: choose a series card",
        ),
    ],
)
def test_the_wrong_kind_of_card_is_the_only_fault(load, name, line):
    assert faults(load, example_path(name)) == (line,)


def test_a_card_without_kind(tmp_path):
    (line,) = faults(load_frame, written(tmp_path, "name = 'x'"))
    assert line.endswith("add the line: card = 'frame'")


# --- fields ---

CAPACITY, SERIAL, BAUD = "capacity_n = 1000.0", 'serial = "KL-CELL-0417"', "speed_baud = 460800"
VERIFIED, NAME = "verified_on = 2026-01-15", 'name = "kiln-lane-a"'
FORCE_RANGE, BAUD_RANGE = "a number > 0 and <= 100000000 N", "a whole number from 300 to 12000000 baud"
FIELDS = [
    (CAPACITY, "capacity_n = -5", f"cell.capacity_n = -5: {FORCE_RANGE}: correct it"),
    (CAPACITY, 'capacity_n = "1"', f"cell.capacity_n = '1': {FORCE_RANGE}: write the number without quotes"),
    (CAPACITY, "capacity_n = true", f"cell.capacity_n = true: {FORCE_RANGE}: write it in this form"),
    (CAPACITY, "capacity_n = nan", f"cell.capacity_n = nan: {FORCE_RANGE}: write a finite number"),
    (CAPACITY, "capacity_n = inf", f"cell.capacity_n = inf: {FORCE_RANGE}: write a finite number"),
    (CAPACITY, "", f"cell.capacity_n = (missing): rated capacity ({FORCE_RANGE}): add this key"),
    (
        "safe_overload_percent",
        "safe_overlaod_percent",
        "cell.safe_overlaod_percent = 150.0: not a key of this table: did you mean safe_overload_percent?",
    ),
    (
        CAPACITY,
        f"{CAPACITY}\nzzz = 1",
        "cell.zzz = 1: not a key of this table: remove it; known keys are serial, ",
    ),
    (VERIFIED, 'verified_on = "2026-01-15"', "cell.verified_on = '2026-01-15': a day as YYYY-MM-DD without"),
    (VERIFIED, "verified_on = 2026-01-15T10:00:00", "cell.verified_on = 2026-01-15T10:00:00: a day as"),
    (
        'position = "supports"',
        'position = "x"',
        "cell.position = 'x': one of 'crosshead', 'supports': choose",
    ),
    ("simulated = true", "simulated = 1", "simulated = 1: true or false: write it in this form"),
    (NAME, 'name = "Kiln lane"', "name = 'Kiln lane': 1 to 32 small letters, digits and '-'"),
    (NAME, 'name = "con"', "name = 'con': this name is reserved by an operating system"),
    (BAUD, "speed_baud = 460800.0", f"links[main].speed_baud = 460800.0: {BAUD_RANGE}"),
    (BAUD, "speed_baud = 299", f"links[main].speed_baud = 299: {BAUD_RANGE}: correct it"),
    ("column = 3\n", "column = 0\n", "channels[crosshead].column = 0: a whole number from 1 to 64: correct"),
    (SERIAL, 'serial = ""', "cell.serial = '': text of 1 to 64 characters: correct it"),
    (SERIAL, 'serial = "KL\\u0007"', "cell.serial = 'KL\\x07': text without control or invisible characters"),
    ("timeout_s = 0.3", "timeout_s = 6", "motion.start.timeout_s = 6: a number > 0 and <= 5 s: correct it"),
    ('letter = "E"', 'letter = "EE"', "inputs[emergency_stop].letter = 'EE': text of at most 1 characters"),
    ("simulated = true", 'simulated = true\n"two\\nlines" = 1', "two\\nlines = 1: not a key of this table"),
    ("simulated = true", f"simulated = true\nx = '{'y' * 300}'", f"x = '{'y' * 56}...: not a key"),
    ("simulated = true", "simulated = true\nx = 12345678901234567890", "x = (a very long number): not a"),
]


@pytest.mark.parametrize(("old", "new", "expected"), FIELDS)
def test_a_field_fault_is_one_complete_line(problems, old, new, expected):
    lines = problems(A, (old, new))
    assert any(line.startswith(expected) for line in lines), lines
    if "serial" not in old:  # the compliance table then belongs to another cell: a true second fault
        assert len(lines) == 1, lines
    assert all(COMPLETE_LINE.match("f: " + line) for line in lines)


def test_a_scalar_where_a_table_is_meant(tmp_path):
    lines = faults(
        load_frame, written(tmp_path, 'card = "frame"\nname = "x"\nsimulated = true\ncell = 5\nlinks = 3')
    )
    assert "cell = 5: a table: write it in this form" in lines
    assert "links = 3: a list of 1 to 8 items: write it in this form" in lines


def test_all_faults_of_a_card_are_told_at_once(problems):
    """Field faults and cross faults together, in the order of the file, without mere consequences."""
    lines = problems(
        A,
        ("capacity_n = 1000.0", "capacity_n = -5"),
        ("verified_min_n = 10.0", 'verified_min_n = "low"'),
        ('dialect = "lines"', 'dialect = "lines"\ncolour = "red"'),
        ("speed_mm_min_max = 60.0", "speed_mm_min_max = 0.01"),
        ("column = 3\n", "column = 2\n"),
        ('send = "S"', 'send = "S{rate_n_s}"'),
        ("load_span_mm = 20.0", "load_span_mm = 50.0"),
    )
    assert [line.partition(" = ")[0] for line in lines] == [
        "cell.capacity_n",
        "cell.verified_min_n",
        "links[main].colour",
        "channels[crosshead].column",
        "motion.speed_mm_min_max",
        "motion.stop.send",
        "fixtures[quarter-40-20].load_span_mm",
    ]


def test_a_removed_key_does_not_cause_a_false_fault(problems):
    """counter_column is faulty: 'counter_modulus needs counter_column' would be a lie."""
    (line,) = problems(A, ("counter_column = 1", "counter_column = 0"))
    assert line.startswith("links[main].lines.counter_column = 0")


def test_an_unreadable_motion_table_is_not_an_absent_one(problems):
    """Else every reply input would be told that there is no status query."""
    (line,) = problems(A, ("stop_latency_s = 0.15", "stop_latency_s = 150"))
    assert line.startswith("motion.stop_latency_s = 150: a number > 0 and <= 5 s")


def test_field_and_cross_faults_of_a_method_together(problems):
    lines = problems(
        "alumina-bars.toml",
        ('mode = "crosshead"', 'mode = "crosshed"'),
        ("load_span_mm = 20.0", "load_span_mm = 13.0"),
        ("strength_mpa = 383.0", "strength_mpa = 38300.0"),
    )
    assert [line.partition(" = ")[0] for line in lines] == [
        "load_span_mm",
        "rate.mode",
        "expected.strength_mpa",
    ]


def test_cross_faults_of_a_method_whose_body_cannot_be_read(problems):
    """geometry is needed for every rule of the body; those of rate and strength still speak."""
    lines = problems(
        "glass-bars.toml",
        ('geometry = "4-point-quarter"', 'geometry = "5-point"'),
        ("load_span_mm = 20.0", "load_span_mm = 13.0"),
        ("rate_mpa_s = 2.0", ""),
        ("strength_mpa = 90.0", 'strength_mpa = "90"'),
    )
    assert [line.partition(" = ")[0] for line in lines] == [
        "geometry",
        "rate.rate_mpa_s",
        "expected.strength_mpa",
    ]


def test_a_flood_of_faults_is_cut_and_counted(tmp_path):
    text = (
        example_path(A)
        .read_text()
        .replace("simulated = true", "simulated = true\n" + "\n".join(f"k{n} = 1" for n in range(150)))
    )
    with pytest.raises(CardError) as caught:
        load_frame(written(tmp_path, text))
    assert len(caught.value.problems) == 101
    assert caught.value.problems[-1] == "and 50 more faults: correct these first"


# --- series ---


def series_folder(tmp_path: Path, *edits: tuple[str, str]) -> Path:
    """demo-series with method and sheet in a folder; an edit goes to the file that holds the text."""
    left = dict(edits)
    for name in ("demo-series.toml", "demo-series.csv", "alumina-demo.toml"):
        text = example_path(name).read_text(encoding="utf-8")
        for old in [old for old in left if old in text]:
            text = text.replace(old, left.pop(old), 1)
        (tmp_path / name).write_text(text, encoding="utf-8")
    assert not left
    return tmp_path / "demo-series.toml"


def test_a_series_brings_method_bars_and_fixture(tmp_path):
    loaded = load_series(series_folder(tmp_path))
    assert loaded.card.name == "demo-series"
    assert loaded.method.name == "alumina-demo"
    assert [bar.number for bar in loaded.specimens] == [f"DEMO-0{n}" for n in range(1, 7)]
    assert loaded.fixture == "quarter-40-20"


MATERIAL = "[expected]\nstrength_mpa = 310.0\nweibull_modulus = 9.0\nmodulus_gpa = 300.0\n"
HUMID = "humidity_percent = 45.0"


def test_a_series_may_name_a_shipped_method_and_brings_its_own_material(tmp_path):
    path = series_folder(tmp_path, ('"alumina-demo.toml"', '"C1161-B"'), (HUMID, HUMID + "\n\n" + MATERIAL))
    loaded = load_series(path)
    assert (loaded.method.name, loaded.method.rate.speed_mm_min) == ("C1161-B", 0.5)
    assert (loaded.method.expected.strength_mpa, loaded.method.expected.modulus_gpa) == (310.0, 300.0)


def test_a_shipped_method_without_a_material_is_refused(tmp_path):
    (line,) = faults(load_series, series_folder(tmp_path, ('"alumina-demo.toml"', '"C1161-B"')))
    assert line.startswith(
        "expected = (missing): a table of this material, because the shipped method C1161-B"
    )


def test_the_material_of_a_series_comes_before_the_method_s_and_is_checked_with_it(tmp_path):
    path = series_folder(tmp_path, (HUMID, HUMID + "\n\n" + MATERIAL))
    assert load_series(path).method.expected.weibull_modulus == 9.0
    soft = series_folder(tmp_path, (HUMID, HUMID + "\n\n" + MATERIAL.replace("300.0", "0.3")))
    (line,) = faults(load_series, soft)
    assert line.startswith("expected.strength_mpa = 310.0: at most 15 MPa")


def test_faults_of_series_method_and_sheet_together(tmp_path):
    path = series_folder(
        tmp_path,
        ("humidity_percent = 45.0", "humidity_percent = 145.0"),
        ("DEMO-03,4.003", "DEMO-03,0"),
        ("DEMO-05,", "DEMO-04,"),
    )
    with pytest.raises(CardError) as caught:
        load_series(path)
    lines = caught.value.problems
    assert len(lines) == 3
    assert lines[0].startswith(f"{path}: humidity_percent = 145.0: a number from 0 to 100 %: correct it")
    assert lines[1].startswith(f"{tmp_path / 'demo-series.csv'}: line 4, width_1_mm = '0'")
    assert lines[2].startswith(f"{tmp_path / 'demo-series.csv'}: line 6, number = 'DEMO-04'")


def test_a_faulty_method_is_told_with_the_series(tmp_path):
    path = series_folder(
        tmp_path, ("load_span_mm = 20.0", "load_span_mm = 13.0"), ('operator = "Kiln', 'operatr = "Kiln')
    )
    with pytest.raises(CardError) as caught:
        load_series(path)
    files = [line.partition(":")[0] for line in caught.value.problems]
    assert files == [str(path), str(path), str(tmp_path / "alumina-demo.toml")]


@pytest.mark.parametrize(
    ("old", "new", "part"),
    [
        ('"alumina-demo.toml"', '"none.toml"', "none.toml: file = cannot be read"),
        (
            '"alumina-demo.toml"',
            '"C1161"',
            "method = 'C1161': the name or the file of a method card: choose one of",
        ),
        ('"demo-series.csv"', '"none.csv"', "none.csv: file = cannot be read"),
        ('"demo-series.csv"', '"alumina-demo.toml"', "alumina-demo.toml: column 1 = "),
        (
            '"alumina-demo.toml"',
            '"demo-series.toml"',
            "card = 'series': 'method', because a method card is wanted here",
        ),
        ('name = "demo-series"', 'name = "../demo"', "name = '../demo': 1 to 64 letters"),
        ('name = "demo-series"', 'name = "nul.1"', "name = 'nul.1': this name is reserved"),
        ('name = "demo-series"', 'name = "demo."', "name = 'demo.': a name does not end with a point"),
    ],
)
def test_a_series_that_refers_wrongly(tmp_path, old, new, part):
    with pytest.raises(CardError) as caught:
        load_series(series_folder(tmp_path, (old, new)))
    assert part in str(caught.value)


# --- examples ---


def test_every_shipped_file_loads():
    kinds = {"frame": load_frame, "method": load_method, "series": load_series}
    for path in sorted(examples_folder().glob("*.toml")):
        kind = re.search(r'^card = "(\w+)"', path.read_text(encoding="utf-8"), re.MULTILINE)
        assert kind is not None
        card = kinds[kind[1]](path)
        assert getattr(card, "card", None) is not None
    assert {path.suffix for path in examples_folder().iterdir()} == {".toml", ".csv"}


def test_an_unknown_example_names_the_known_ones():
    with pytest.raises(CardError, match=r"alumina-bars\.toml"):
        example_path("none.toml")


def test_a_card_survives_json_and_its_rules_are_checked_without_a_file():
    card = load_frame(example_path(A))
    assert FrameCard.model_validate_json(card.model_dump_json()) == card
    assert check_frame(card) is card
    broken = card.model_copy(update={"cell": card.cell.model_copy(update={"verified_max_n": 1100.0})})
    with pytest.raises(CardError, match=r"^frame card: cell.verified_max_n = 1100.0: at most the capacity"):
        check_frame(broken)


def test_the_demo_lane_is_lane_a_with_a_short_approach():
    lane_a, demo = load_frame(example_path(A)), load_frame(example_path("kiln-lane-demo.toml"))
    assert demo.motion is not None
    assert (demo.motion.gap_mm, demo.motion.backoff_mm) == (0.15, 0.3)
    assert lane_a.motion is not None
    patient = ("start", "stop", "jog", "retreat", "force_rate", "status")  # longer time-outs, the same words
    for name in patient:
        theirs, ours = getattr(demo.motion, name), getattr(lane_a.motion, name)
        assert theirs.model_copy(update={"timeout_s": ours.timeout_s}) == ours
    commands = {name: getattr(lane_a.motion, name) for name in patient}
    motion = demo.motion.model_copy(update={"gap_mm": 2.0, "backoff_mm": 2.0, **commands})
    link = demo.links[0].model_copy(update={"port": lane_a.links[0].port})
    same = {"name": lane_a.name, "title": lane_a.title, "links": (link,), "motion": motion}
    assert demo.model_copy(update=same) == lane_a


def test_the_alumina_series_is_thirty_bars_of_four_by_three():
    bars = load_series(example_path("alumina-series.toml")).specimens
    assert len(bars) == 30
    for bar in bars:
        assert all(3.975 <= width <= 4.025 for width in bar.width_mm)
        assert all(2.975 <= thickness <= 3.025 for thickness in bar.thickness_mm)
