"""The shipped method cards against a catalogue of standards, and own cards that come before them.

Marks: C confirmed on a public page, K computed with an independent general library, M from memory.
"""

from __future__ import annotations

import tomllib
from collections.abc import Iterator

import pytest

from daq.cards.cautions import cautions
from daq.cards.derived import geometry_of
from daq.cards.library import clauses_by_key, find_method, methods_folder, read_library
from daq.cards.load import example_path, load_frame
from daq.cards.method import MethodCard
from daq.errors import CardError

LIBRARY = read_library()
CARDS = {found.card.name: found.card for found in LIBRARY.methods}
HEADING = {"card", "name", "title", "standard", "scope", "notes", "clauses"}

WANTED = [
    "C1161-A",
    "C1161-B",
    "C1161-C",
    "ISO-14704",
    "EN-843-1-A",
    "EN-843-1-B",
    "C1684-4pt",
    "C293",
    "C78",
    "EN-12390-5",
    "EN-196-1",
    "C348",
    "D790",
    "ISO-178",
    "ISO-6872",
    "ISO-4049",
    "C158-A",
    "EN-1288-3",
    "C674-bar",
    "C674-rod",
    "C133",
    "ISO-10545-4",
    "C880",
    "C99",
    "C1341-I",
    "C1341-IIA",
    "C1341-IIB",
    "ISO-14125-I-3pt",
    "ISO-14125-III-4pt",
    "C651",
]

# name: support span, load span, sizes, rate in its own unit; all of the catalogue, marks as there
FIGURES = {
    "C1161-A": (20, 10, (2, 1.5), 0.2),
    "C1161-B": (40, 20, (4, 3), 0.5),
    "C1161-C": (80, 40, (8, 6), 1.0),
    "ISO-14704": (40, 20, (4, 3), 0.5),
    "EN-843-1-A": (20, 10, (2.5, 2), None),
    "EN-843-1-B": (40, 20, (4, 3), None),
    "C293": (450, 0, (150, 150), None),
    "C78": (450, 150, (150, 150), None),
    "EN-12390-5": (450, 150, (150, 150), None),
    "EN-196-1": (100, 0, (40, 40), 50.0),
    "C348": (119, 0, (40, 40), 44.0),
    "D790": (51.2, 0, (12.7, 3.2), 1.36533),
    "ISO-178": (64, 0, (10, 4), 2.0),
    "ISO-6872": (16, 0, (4, 1.2), 1.0),
    "ISO-4049": (20, 0, (2, 2), 0.75),
    "C158-A": (200, 100, (38, 6), 1.1),
    "EN-1288-3": (1000, 200, (360, 6), 2.0),
    "C674-bar": (101.6, 0, (25.4, 12.7), 74.2),
    "C133": (177.8, 0, (114.3, 63.5), 0.15),
    "ISO-10545-4": (280, 0, (300, 9), 1.0),
    "C880": (318, 159, (102, 32), 0.069),
    "C99": (177.8, 0, (101.6, 57.2), 74.0),
    "C651": (60, 20, (10, 10), None),
}


def leaf_keys(tree: object, path: tuple[str, ...] = ()) -> Iterator[str]:
    if isinstance(tree, dict):
        for key, value in tree.items():
            yield from leaf_keys(value, (*path, key))
    else:
        yield ".".join(path)


def rate_of(card: MethodCard) -> float | None:
    rate = card.rate
    return {"crosshead": rate.speed_mm_min, "force": rate.rate_n_s, "stress": rate.rate_mpa_s}[rate.mode]


def test_every_standard_of_the_catalogue_is_there():
    assert set(WANTED) <= set(CARDS)
    assert LIBRARY.problems == ()


@pytest.mark.parametrize("name", FIGURES)
def test_figures_are_those_of_the_catalogue(name):
    support, load, sizes, rate = FIGURES[name]
    card = CARDS[name]
    spans = geometry_of(card)
    assert (card.support_span_mm, spans.load_mm) == (support, pytest.approx(load, rel=1e-9))
    assert (card.width_mm, card.thickness_mm) == sizes
    if rate is not None:
        assert rate_of(card) == pytest.approx(rate, rel=1e-4)


@pytest.mark.parametrize("path", sorted(methods_folder().glob("*.toml")), ids=lambda path: path.stem)
def test_every_value_of_a_shipped_card_has_a_mark(path):
    """Every value: a clause with a mark; nothing shipped claims a signature; the file is named as the card."""
    tree = tomllib.loads(path.read_text(encoding="utf-8"))
    card = CARDS[path.stem]
    assert card.name == path.stem and card.standard and card.edition
    marked = clauses_by_key(card)
    assert {key for key in leaf_keys(tree) if key.split(".")[0] not in HEADING} == set(marked)
    assert len(marked) == len(card.clauses)
    assert {clause.mark for clause in card.clauses} <= {"confirmed", "from memory", "own choice"}
    assert all(clause.source for clause in card.clauses if clause.mark == "confirmed")
    assert all(clause.mark == "own choice" for key, clause in marked.items() if key.startswith("expected."))


CONFIRMED = [  # cells of the catalogue with mark C
    ("C78", "validity.break_place.near_percent"),
    ("C78", "validity.break_place.beyond"),
    ("EN-196-1", "rate.band_n_s"),
    ("EN-196-1", "needs.roller_diameter_mm"),
    ("EN-196-1", "validity.force_range_percent"),
    ("EN-1288-3", "rate.band_mpa_s"),
    ("ISO-178", "rounding.stress_digits"),
    ("D790", "rate.tolerance_percent"),
    ("ISO-10545-4", "validity.breaking_strength_n_max"),
    ("C99", "validity.bars_min"),
]
REMEMBERED = [  # cells with mark M
    ("C1161-B", "rate.speed_mm_min"),
    ("C1161-B", "chamfer_mm"),
    ("C1161-B", "validity.bars_weibull_min"),
    ("EN-12390-5", "rate.band_mpa_s"),
    ("C348", "strength.printed_factor_mpa_n"),
    ("ISO-6872", "rate.speed_band_mm_min"),
    ("ISO-4049", "rate.speed_mm_min"),
    ("C78", "rate.band_mpa_s"),
    ("ISO-178", "validity.break_place.region"),
]


@pytest.mark.parametrize(("name", "key"), CONFIRMED)
def test_what_is_confirmed_says_so(name, key):
    assert clauses_by_key(CARDS[name])[key].mark == "confirmed"


@pytest.mark.parametrize(("name", "key"), REMEMBERED)
def test_what_is_remembered_says_so(name, key):
    assert clauses_by_key(CARDS[name])[key].mark == "from memory"


def test_the_concrete_rule_is_data():
    """Within 5 % of the span outside the middle third: the stress at the break; further out: not counted."""
    place = CARDS["C78"].validity.break_place
    assert (place.region, place.near_percent) == ("load span", 5.0)
    assert (place.near_stress, place.beyond, place.needed) == ("at the break", "not counted", True)


def test_an_own_card_comes_before_the_shipped_one(tmp_path):
    shipped = find_method("c1161_b")
    assert (shipped.own, shipped.card.name) == (False, "C1161-B")
    text = shipped.path.read_text(encoding="utf-8")
    (tmp_path / "mine.toml").write_text(
        text.replace("speed_mm_min = 0.5", "speed_mm_min = 0.4"), encoding="utf-8"
    )
    (tmp_path / "frame.toml").write_text(
        example_path("kiln-lane-a.toml").read_text(encoding="utf-8"), encoding="utf-8"
    )
    own = find_method("C1161-B", [tmp_path])
    assert own.own and own.hides and own.card.rate.speed_mm_min == 0.4
    (listed,) = [found for found in read_library([tmp_path]).methods if found.card.name == "C1161-B"]
    assert listed == own
    assert find_method(str(tmp_path / "mine.toml")).card == own.card
    assert not find_method("C1161-A", [tmp_path]).own


def test_a_faulty_own_card_is_told_and_hides_nothing(tmp_path):
    (tmp_path / "bad.toml").write_text('card = "method"\nname = "bad"\n', encoding="utf-8")
    library = read_library([tmp_path])
    assert len(library.methods) == len(LIBRARY.methods)
    assert any("bad.toml: geometry = (missing)" in line for line in library.problems)
    with pytest.raises(CardError, match=r"bad\.toml: geometry"):
        find_method("bad", [tmp_path])


@pytest.mark.parametrize(
    ("name", "told"),
    [
        ("C1161", "choose one of C1161-A"),
        ("ISO 17", "ISO-178"),
        ("zzz", "see `midspan methods`"),
        ("", "see"),
    ],
)
def test_an_unknown_name_names_its_neighbours(name, told):
    with pytest.raises(CardError) as caught:
        find_method(name)
    (line,) = caught.value.problems
    assert told in line


def test_a_folder_that_is_none(tmp_path):
    with pytest.raises(CardError, match="a folder of method cards"):
        read_library([tmp_path / "nothere"])


def test_own_choices_are_not_told_as_unchecked():
    """Only values of the standard wait for a signature."""
    import datetime as dt

    frame = load_frame(example_path("kiln-lane-a.toml"))
    lines = cautions(frame, CARDS["C1161-B"], fixture="quarter-40-20", today=dt.date(2026, 12, 1))
    (line,) = [line for line in lines if "not checked against the standard" in line]
    signs = [clause for clause in CARDS["C1161-B"].clauses if clause.mark != "own choice"]
    assert line.endswith(f" and {len(signs) - 5} more") and line.count(",") == 4
