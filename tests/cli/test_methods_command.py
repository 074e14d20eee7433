"""midspan methods: the list, one card, its marks, own cards, one line for what cannot be had."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from daq.cards.load import load_method
from daq.cli.root import midspan


@pytest.fixture(autouse=True)
def no_own_folder(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setenv("XDG_CONFIG_HOME", str(tmp_path / "config"))


def called(*words: str) -> Result:
    result = CliRunner().invoke(midspan, list(words))
    assert result.exception is None or isinstance(result.exception, SystemExit), result.exc_info
    return result


def test_the_list_names_standard_and_marks():
    shown = called("methods").output
    assert "EN-196-1" in shown and "EN 196-1 (2016)" in shown and "confirmed" in shown
    rows = json.loads(called("methods", "--json").output)
    assert len(rows) > 30 and all(row["standard"] and "from memory" in row["marks"] for row in rows)


def test_one_card_tells_the_mark_of_each_value():
    lines = called("methods", "show", "c1161-b").output.splitlines()
    (speed,) = [line for line in lines if "test speed" in line]
    assert speed.split()[:4] == ["0.5", "mm/min", "from", "memory"]
    (span,) = [line for line in lines if "support span the fixture" in line]
    assert span.split()[:3] == ["40", "mm", "confirmed"]
    assert any(line.startswith("Not checked against the standard") for line in lines)


def test_a_copy_can_be_signed_and_then_says_so(tmp_path):
    text = called("methods", "show", "C1161-B", "--toml").output
    for mark in ("confirmed", "from memory"):
        text = text.replace(
            f'mark = "{mark}"', 'mark = "checked"\nchecked_by = "K. Lane"\nchecked_on = "2026-11-30"'
        )
    folder = tmp_path / "config" / "midspan" / "methods"
    folder.mkdir(parents=True)
    (folder / "signed.toml").write_text(text, encoding="utf-8")
    shown = called("methods", "show", "C1161-B").output
    assert "by K. Lane on 2026-11-30" in shown and "Not checked against" not in shown
    (row,) = [row for row in json.loads(called("methods", "--json").output) if row["name"] == "C1161-B"]
    assert row["own"] and "instead of the shipped" in row["marks"]
    assert load_method(folder / "signed.toml").model_dump(mode="json") == json.loads(
        called("methods", "show", "C1161-B", "--json").output
    )


def test_what_cannot_be_had_is_one_line(tmp_path):
    for words, told in (
        (("methods", "show", "C1161"), "choose one of C1161-A"),
        (("methods", "show", "nothere.toml"), "cannot be read"),
        (("methods", "--methods", str(tmp_path / "nothere")), "a folder of method cards"),
        (("methods", "bogus"), "No such command"),
        (("methods", "show"), "Missing argument 'NAME'"),
    ):
        result = called(*words)
        assert result.exit_code in (1, 2) and told in result.stderr, result.stderr
        assert len(result.stderr.splitlines()) == 1
