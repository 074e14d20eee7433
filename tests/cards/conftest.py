"""Tools of the card tests: a shipped example, changed in one place, and the fault lines that come of it."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from daq.cards.load import example_path, load_frame, load_method
from daq.errors import CardError

Edits = tuple[tuple[str, str], ...]


def edited(name: str, edits: Edits) -> str:
    text = example_path(name).read_text(encoding="utf-8")
    for old, new in edits:
        assert old in text, f"{name} no longer holds {old!r}"
        text = text.replace(old, new, 1)
    return text


@pytest.fixture
def problems(tmp_path: Path) -> Callable[..., tuple[str, ...]]:
    """problems('kiln-lane-a.toml', (old, new), ...) -> lines of the CardError without the file, or ()."""

    def lines_of(name: str, *edits: tuple[str, str]) -> tuple[str, ...]:
        path = tmp_path / name
        path.write_text(edited(name, edits), encoding="utf-8")
        load = load_frame if name.startswith("kiln") else load_method
        try:
            load(path)
        except CardError as error:
            lines = error.problems
        else:
            return ()
        assert all(line.startswith(f"{path}: ") for line in lines)
        return tuple(line.removeprefix(f"{path}: ") for line in lines)

    return lines_of


@pytest.fixture
def changed(tmp_path: Path) -> Callable[..., object]:
    """changed('kiln-lane-a.toml', (old, new), ...) -> the card, which must load."""

    def card_of(name: str, *edits: tuple[str, str]) -> object:
        path = tmp_path / f"changed-{name}"
        path.write_text(edited(name, edits), encoding="utf-8")
        return load_frame(path) if name.startswith("kiln") else load_method(path)

    return card_of
