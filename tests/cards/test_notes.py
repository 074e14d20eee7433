"""Origin codes and notes: what is understood, what is refused in one line, and that a later note keeps the earlier."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from daq.cards.notes import merged_break_note, read_note
from daq.cards.origins import Joiner, Lies, read_origin
from daq.errors import CardError

HEAD = {"name": "Q. Tester", "utc": "2031-05-06T07:08:09.123+00:00"}


@pytest.mark.parametrize(
    ("text", "population"),
    [  # the examples of the NIST fracture pages, "Miscellaneous or Mixed Origins"
        ("Pv&LGv", "Pv"),
        ("Av/Pv", ""),
        ("Pv+MDs", "Pv+MDs"),
        ("Pv?", ""),
        ("-", ""),
        ("?", ""),
        ("IFe", "IFe"),
        ("pore", "pore"),
        ("edge chip", "edge chip"),
        ("Pv&MDs?", "Pv"),
    ],
)
def test_joiners_of_the_trade(text: str, population: str) -> None:
    assert read_origin(text).population == population


def test_parts_of_a_code() -> None:
    origin = read_origin("IFev & MDs?")
    assert [(term.code, term.lies, term.certain) for term in origin.terms] == [
        ("IFe", Lies.VOLUME, True),
        ("MD", Lies.SURFACE, False),
    ]
    assert origin.joiners == (Joiner.SECONDARY,)
    assert read_origin("MDs").words == "machining damage at the surface"


@pytest.mark.parametrize("text", ["3$", "Pv&", "&Pv", "Pv&&A", "P" * 70, "A/B/C/D/E", "Pv??", "ünklar"])
def test_what_is_no_code_is_refused_in_one_line(text: str) -> None:
    with pytest.raises(ValueError, match="origin") as refused:
        read_origin(text)
    assert "\n" not in str(refused.value)


@given(st.text(max_size=80))
def test_any_text_is_read_or_refused(text: str) -> None:
    try:
        origin = read_origin(text)
    except ValueError:
        return
    assert len(origin.joiners) == max(len(origin.terms) - 1, 0)


@pytest.mark.parametrize(
    ("fields", "word"),
    [
        ({"remark": "x", "name": ""}, "name"),
        ({"remark": "x", "utc": "yesterday"}, "utc"),
        ({}, "one thing"),
        ({"remark": "x", "break_note": {"pieces": 2}}, "one thing"),
        ({"correction": {"quantity": "width_mm", "old": [4.0], "new": [4.1]}}, "reason"),
        ({"reason": "r", "correction": {"quantity": "width_mm", "old": [], "new": [0.0]}}, "above 0"),
        ({"reason": "r", "correction": {"quantity": "width_mm", "old": [], "new": [-1.0]}}, "new"),
        ({"reason": "r", "correction": {"quantity": "width_mm", "old": [], "new": [float("nan")]}}, "new"),
        (
            {"reason": "r", "correction": {"quantity": "chamfer_mm", "old": [], "new": [0.1, 0.2]}},
            "one number",
        ),
        ({"reason": "r", "correction": {"quantity": "mass_kg", "old": [], "new": [1.0]}}, "quantity"),
        ({"verdict": {"old": "counted", "new": "not counted"}}, "reason"),
        ({"reason": "r", "verdict": {"old": "counted", "new": "splendid"}}, "verdict"),
        ({"break_note": {"pieces": 0}}, "pieces"),
        ({"break_note": {"from_mid_mm": []}}, "from_mid_mm"),
        ({"break_note": {"origin": "3$"}}, "origin"),
        ({"break_note": {"colour": "red"}}, "colour"),
        ({"remark": "a\u202eb"}, "invisible"),
    ],
)
def test_bad_notes_are_one_clear_line_a_fault(fields: dict, word: str) -> None:
    with pytest.raises(CardError, match=word) as refused:
        read_note({**HEAD, **fields})
    assert all(line and "\n" not in line for line in refused.value.problems)


def test_a_later_break_note_adds_and_replaces_only_what_it_says() -> None:
    told = [
        {"from_mid_mm": (3.5, -9.0), "pieces": 3, "pictures": [{"file": "a.jpg", "sha256": "0" * 64}]},
        {"origin": "Pv", "pictures": [{"file": "b.jpg", "sha256": "1" * 64}]},
        {"pieces": 2},
    ]
    note = merged_break_note(tuple(read_note({**HEAD, "break_note": fields}) for fields in told))
    assert note is not None
    assert (note.from_mid_mm, note.pieces, note.origin) == ((3.5, -9.0), 2, "Pv")
    assert [picture.file for picture in note.pictures] == ["a.jpg", "b.jpg"]
    assert merged_break_note((read_note({**HEAD, "remark": "x"}),)) is None
