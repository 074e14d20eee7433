"""docs/cards.md, written from the models: every key with unit, allowed values, default and meaning.

python -m daq.cards.doc > docs/cards.md
"""

from __future__ import annotations

import sys
from collections.abc import Iterator, Mapping

from daq.cards.base import Card
from daq.cards.describe import Path, about_at, allowed_at, keys_at, node_at, unit_at
from daq.cards.faults import show
from daq.cards.schema import CARDS
from daq.cards.series import Specimen

INTRODUCTION = """# Cards

This page is made from the code (`python -m daq.cards.doc > docs/cards.md`); a test fails when it is stale.

A card is a small TOML file (UTF-8, at most 256 KiB, at most 8 levels). Units stand in the names of the keys:
`_n` is newton, `_mm` millimetre, `_mm_min` millimetre per minute. An unknown key is an error, text where a
number is meant is an error, and nothing is converted. Every fault is told in one line:
`file: key = value: allowed: what to do`.

Shipped examples (all invented) lie in `daq/cards/examples/`: copy one and change it.
"""
SHEET = """## Bench sheet

A CSV table beside the series card, one row a bar; the first line names the columns. UTF-8, delimiter comma
or semicolon; a decimal comma is accepted where the delimiter is a semicolon. For a rectangle, three readings:

    number,width_1_mm,width_2_mm,width_3_mm,thickness_1_mm,thickness_2_mm,thickness_3_mm,chamfer_mm,length_mm
    KL-01,4.007,4.003,4.004,3.018,3.013,3.018,0.12,45.2

`chamfer_mm`, `length_mm`, `batch` and `note` may be left out. Circle and tube have `diameter_1_mm` and so on
instead of width and thickness; a tube also needs `inner_diameter_mm`. Each reading is a number > 0; text,
zero, a negative number, another unit than mm, an empty reading and a number used twice are refused, cell by
cell.
"""


def cards_markdown() -> str:
    """The whole page."""
    parts = [INTRODUCTION]
    for kind, model in CARDS.items():
        parts.append(card_section(f"{kind.capitalize()} card", model))
    parts.append(SHEET)
    parts.append("What is kept of each bar:\n\n" + "\n".join(_rows(Specimen, ())) + "\n")
    return "\n".join(parts)


def card_section(title: str, model: type[Card], without: tuple[str, ...] = ()) -> str:
    """One card: its tables, but for keys told elsewhere."""
    return "\n".join([f"## {title}\n\n{model.__doc__}\n", *_tables(model, (), without)])


def _tables(model: type[Card], path: Path, without: tuple[str, ...] = ()) -> Iterator[str]:
    """The table of one level, then those below it."""
    if path:
        yield f"### `{_title(model, path)}`\n"
    yield "\n".join(_rows(model, path, without)) + "\n"
    for key in keys_at(model, path):
        below: Path = (*path, key)
        if keys_at(model, below):
            yield from _tables(model, below)
        elif keys_at(model, (*below, 0)):
            yield from _tables(model, (*below, 0))


def _title(model: type[Card], path: Path) -> str:
    words = [str(step) for step in path if isinstance(step, str)]
    name = ".".join(words)
    return f"[[{name}]]" if path[-1] == 0 else f"[{name}]"


def _rows(model: type[Card], path: Path, without: tuple[str, ...] = ()) -> Iterator[str]:
    yield "| key | unit | allowed | default | meaning |"
    yield "|---|---|---|---|---|"
    for key in (key for key in keys_at(model, path) if key not in without):
        at: Path = (*path, key)
        cells = (
            f"`{key}`",
            unit_at(model, at),
            allowed_at(model, at),
            _default(model, at),
            about_at(model, at),
        )
        yield "| " + " | ".join(cell.replace("|", "\\|") for cell in cells) + " |"


def _default(model: type[Card], path: Path) -> str:
    node = node_at(model, path)
    assert node is not None
    if "default" not in node:
        return "must be given"
    value = node["default"]
    if value is None:
        return "left out"
    if isinstance(value, Mapping):
        return "its defaults"
    if value in ("", (), []):
        return "empty"
    return f"`{show(value)}`"


if __name__ == "__main__":
    sys.stdout.write(cards_markdown())
