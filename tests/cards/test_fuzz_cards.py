"""Whatever stands in a file, the answer is a card or a CardError of complete lines; nothing else gets out."""

from __future__ import annotations

import datetime as dt
import json
import re
import tomllib

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.cards.load import check_fit, example_path, load_frame, load_method, load_series
from daq.cards.questions import questions
from daq.cards.sheet import read_sheet
from daq.errors import CardError

COMPLETE_LINE = re.compile(r"^[^\n]+?: [^\n]+? = [^\n]*: [^\n]+: [^\n]+$")
FLOOD_LINE = re.compile(r"^and \d+ more faults: correct these first$")
LOADERS = {"frame": load_frame, "method": load_method, "series": load_series}
NAMES = ["kiln-lane-a.toml", "kiln-lane-b.toml", "kiln-lane-c.toml", "alumina-bars.toml", "glass-bars.toml"]


def judged(load, path) -> bool:
    """True when it loads; every line of a refusal must be complete."""
    problems = refusal(lambda: load(path))
    for line in problems or ():
        assert COMPLETE_LINE.match(line) or FLOOD_LINE.match(line), line
        assert line.isprintable()
    assert problems is None or len(problems) > 0
    return problems is None


def refusal(act) -> tuple[str, ...] | None:
    """Lines of the CardError; None when there was none."""
    try:
        act()
    except CardError as error:
        return error.problems
    return None


def toml_of(value) -> str:
    """A value as TOML text; tables inside are written inline."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, dict):
        return "{" + ", ".join(f"{json.dumps(key)} = {toml_of(item)}" for key, item in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(toml_of(item) for item in value) + "]"
    if isinstance(value, dt.date | dt.time):
        return value.isoformat()
    if isinstance(value, str):
        return json.dumps(value).replace("\x7f", "\\u007f")
    return repr(value)


SCALARS = st.one_of(
    st.booleans(),
    st.integers(-(2**70), 2**70),
    st.floats(),
    st.sampled_from(
        [0, -1, 1, 1e308, "", "force", "main", "N", "mm", "quarter-40-20", "../x", "{speed_mm_min}", "{"]
    ),
    st.dates(),
    st.times(),
    st.datetimes(),
    st.text(st.characters(exclude_categories=["Cs"]), max_size=12),
)
VALUES = st.recursive(
    SCALARS,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=6), inner, max_size=3),
    max_leaves=6,
)


def places(tree, at=()):
    """Every place of a parsed card."""
    if isinstance(tree, dict):
        for key, value in tree.items():
            yield (*at, key)
            yield from places(value, (*at, key))
    if isinstance(tree, list):
        for number, value in enumerate(tree):
            yield (*at, number)
            yield from places(value, (*at, number))


def replaced(tree, path, change):
    """The tree with one place changed: change(parent, key)."""
    copy = json.loads(json.dumps(tree, default=lambda day: {"day": day.isoformat()}))
    copy = revived(copy)
    parent = copy
    for step in path[:-1]:
        parent = parent[step]
    change(parent, path[-1])
    return copy


def revived(value):
    if isinstance(value, dict):
        if set(value) == {"day"}:
            return dt.date.fromisoformat(value["day"])
        return {key: revived(item) for key, item in value.items()}
    return [revived(item) for item in value] if isinstance(value, list) else value


CARDS = {name: tomllib.loads(example_path(name).read_text(encoding="utf-8")) for name in NAMES}
PLACES = [(name, path) for name, card in CARDS.items() for path in places(card)]


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return tmp_path_factory.mktemp("fuzz")


def written(folder, tree) -> object:
    path = folder / "card.toml"
    path.write_text(
        "\n".join(f"{json.dumps(key)} = {toml_of(value)}" for key, value in tree.items()), "utf-8"
    )
    return path


def test_the_writer_of_this_test_writes_toml(folder):
    for name, card in CARDS.items():
        assert judged(LOADERS[card["card"]], written(folder, card)), name


@pytest.mark.slow
@settings(max_examples=150, deadline=None)
@given(place=st.sampled_from(PLACES), value=VALUES)
def test_any_value_at_any_place(folder, place, value):
    name, path = place

    def put(parent, key):
        parent[key] = value

    tree = replaced(CARDS[name], path, put)
    for load in LOADERS.values():
        judged(load, written(folder, tree))


@pytest.mark.slow
@settings(max_examples=100, deadline=None)
@given(place=st.sampled_from(PLACES), other=st.sampled_from(PLACES))
def test_any_place_removed_and_another_doubled(folder, place, other):
    name, path = place

    def drop(parent, key):
        del parent[key]

    tree = replaced(CARDS[name], path, drop)
    judged(LOADERS[CARDS[name]["card"]], written(folder, tree))
    name, path = other

    def double(parent, key):
        if isinstance(parent, list):
            parent.append(parent[key])
        else:
            parent[f"{key}2"] = parent[key]

    tree = replaced(CARDS[name], path, double)
    judged(LOADERS[CARDS[name]["card"]], written(folder, tree))


@pytest.mark.slow
@settings(max_examples=150, deadline=None)
@given(
    place=st.sampled_from(PLACES), factor=st.sampled_from([-1.0, 0.0, 1e-6, 1e-3, 0.5, 2.0, 60.0, 1e3, 1e9])
)
def test_a_number_that_loads_can_always_be_asked_about(folder, place, factor):
    """Questions, fit and cautions work on every card that loaded, however odd its numbers."""
    name, path = place

    def scale(parent, key):
        if isinstance(parent[key], float):
            parent[key] *= factor

    tree = replaced(CARDS[name], path, scale)
    file = written(folder, tree)
    kind = CARDS[name]["card"]
    if not judged(LOADERS[kind], file):
        return
    frame = load_frame(file if kind == "frame" else example_path("kiln-lane-a.toml"))
    method = load_method(file if kind == "method" else example_path("alumina-bars.toml"))
    for fixture in (None, *(item.name for item in frame.fixtures)):
        for question in questions(frame, method, fixture=fixture):
            assert question.line.isprintable()
        if fixture is not None:
            lines = refusal(lambda name=fixture: check_fit(frame, method, name))
            assert all(COMPLETE_LINE.match(line) for line in lines or ())


@pytest.mark.slow
@settings(max_examples=150, deadline=None)
@given(data=st.binary(max_size=200))
def test_any_bytes(folder, data):
    path = folder / "bytes.toml"
    path.write_bytes(data)
    for load in LOADERS.values():
        judged(load, path)


@pytest.mark.slow
@settings(max_examples=150, deadline=None)
@given(lines=st.lists(st.text("abcx_.=[]{}\"'#,0123456789-+eE \t\\u", max_size=30), max_size=8))
def test_toml_like_text(folder, lines):
    path = folder / "text.toml"
    path.write_text("card = 'frame'\n" + "\n".join(lines), encoding="utf-8")
    judged(load_frame, path)


METHODS = [load_method(example_path(name)) for name in ("alumina-bars.toml", "mortar-prisms.toml")]
CELL = st.one_of(
    st.sampled_from(
        ["", "4.001", "4,001", "0", "-1", "A1", "number", "width_1_mm", "thickness_1_mm", '"', "\ufeff", "\0"]
    ),
    st.text(max_size=8),
)


@pytest.mark.slow
@settings(max_examples=150, deadline=None)
@given(
    rows=st.lists(st.lists(CELL, max_size=8), max_size=6),
    delimiter=st.sampled_from([",", ";", "\t"]),
    good_header=st.booleans(),
    method=st.sampled_from(METHODS),
)
def test_any_sheet(rows, delimiter, good_header, method):
    header = [
        "number",
        *(f"{side}_{n}_mm" for side in ("width", "thickness") for n in range(1, method.readings + 1)),
    ]
    table = [header, *rows] if good_header else rows
    sheet = read_sheet("\n".join(delimiter.join(row) for row in table), method)
    for fault in sheet.faults:
        assert COMPLETE_LINE.match(fault.line("s", {})), fault
    for bar in sheet.specimens:
        assert len(bar.width_mm) == len(bar.thickness_mm) == method.readings
        assert min((*bar.width_mm, *bar.thickness_mm)) > 0
