"""Names that may become part of a file name."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.cards.names import NAME_CHARACTERS_MAX, has_control, name_fault


@pytest.mark.parametrize("name", ["a", "KL-01", "x_1.2", "9", "console", "com10", "a" * 64, "A.b-c_d"])
def test_good_names(name):
    assert name_fault(name) is None


@pytest.mark.parametrize(
    ("name", "part"),
    [
        ("", "1 to 64 characters"),
        ("a" * 65, "this one has 65"),
        ("a/b", "no separators"),
        ("a\\b", "no separators"),
        ("a b", "no blanks"),
        ("a\n", "made of the letters"),
        ("a\0", "made of the letters"),
        ("ä", "made of the letters"),
        ("a:b", "made of the letters"),
        (".hidden", "begins with"),
        ("..", "begins with"),
        ("-rf", "begins with"),
        ("_x", "begins with"),
        ("x.", "end with a point"),
        ("CON", "reserved"),
        ("nul.txt", "reserved"),
        ("Lpt9", "reserved"),
    ],
)
def test_bad_names_say_why(name, part):
    fault = name_fault(name)
    assert fault is not None
    assert part in fault


@pytest.mark.slow
@settings(max_examples=200, deadline=None)
@given(st.text(max_size=NAME_CHARACTERS_MAX + 5))
def test_an_accepted_name_stays_in_its_folder(text):
    if name_fault(text) is None:
        assert "/" not in text and "\\" not in text and "\0" not in text and text[:2] != ".."
        assert text.isascii() and text.isprintable() and len(text.encode()) <= NAME_CHARACTERS_MAX


@pytest.mark.parametrize("text", ["a\x1b[2J", "a\x7f", "a\x85", "a\u202eb", "a\u200bb", "\ufeffa", "a\tb"])
def test_characters_that_garble_a_terminal(text):
    assert has_control(text)


@pytest.mark.parametrize("text", ["", "Prüfer Ångström", "25 °C", "a-b_c"])
def test_plain_text_has_none(text):
    assert not has_control(text)
