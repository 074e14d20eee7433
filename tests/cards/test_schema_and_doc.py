"""JSON Schema, the page docs/cards.md, and the examples, against each other."""

from __future__ import annotations

import json
import tomllib
from collections.abc import Iterator, Mapping
from pathlib import Path

import jsonschema
import pytest

from daq.cards.describe import PATTERN_WORDS, about_at, allowed_at, keys_at, node_at, unit_at
from daq.cards.doc import cards_markdown
from daq.cards.load import examples_folder
from daq.cards.schema import CARDS, all_schemas, card_schema

EXAMPLES = sorted(examples_folder().glob("*.toml"))
PAGE = Path(__file__).parents[2] / "docs" / "cards.md"
# Last parts of a key and the unit they promise; the longest that fits counts.
UNIT_OF_SUFFIX = {
    "_mm_min": "mm/min", "_n_mm": "N/mm", "_n_s": "N/s", "_mpa_s": "MPa/s", "_n": "N", "_mm": "mm",
    "_um": "um", "_s": "s", "_hz": "Hz", "_percent": "%", "_kg": "kg", "_mpa": "MPa", "_gpa": "GPa", "_baud": "baud",
    "_bits": "bit",  "_c": "degC", "_sigma": "sigma", "_bytes": "bytes", "_on": "date", "_due": "date",
    "_per_s": "1/s", "_mpa_n": "MPa/N",
}  # fmt: skip
NO_UNIT = {
    "column",
    "bit",
    "readings",
    "tcp_port",
    "counter_modulus",
    "weibull_modulus",
    "poisson_ratio",
    "data_bits",
    "bars_min",
    "bars_weibull_min",
    "stress_digits",
}


def plain(path: Path) -> object:
    return json.loads(
        json.dumps(tomllib.loads(path.read_text(encoding="utf-8")), default=lambda day: day.isoformat())
    )


@pytest.mark.parametrize("kind", CARDS)
def test_the_schema_is_a_schema(kind):
    jsonschema.Draft202012Validator.check_schema(card_schema(kind))
    assert all_schemas()[kind] == card_schema(kind)


@pytest.mark.parametrize("path", EXAMPLES, ids=[path.name for path in EXAMPLES])
def test_the_schema_accepts_the_examples_and_refuses_an_unknown_key(path):
    card = plain(path)
    assert isinstance(card, dict)
    validator = jsonschema.Draft202012Validator(card_schema(str(card["card"])))
    assert list(validator.iter_errors(card)) == []
    assert list(validator.iter_errors(card | {"colour": "red"})) != []
    assert list(validator.iter_errors(card | {"name": 5})) != []


def every_key(model, path=()) -> Iterator[tuple[str | int, ...]]:
    for key in keys_at(model, path):
        at = (*path, key)
        yield at
        yield from every_key(model, at)
        if node_at(model, (*at, 0)) is not None:
            yield from every_key(model, (*at, 0))


ALL_KEYS = [(kind, path) for kind, model in CARDS.items() for path in every_key(model)]


def test_every_key_says_what_it_means_and_what_is_allowed():
    assert len(ALL_KEYS) > 150
    for kind, path in ALL_KEYS:
        assert about_at(CARDS[kind], path), (kind, path)
        assert allowed_at(CARDS[kind], path) not in ("", "a value", "no such key"), (kind, path)


def test_the_unit_of_a_key_is_the_one_in_its_name():
    for kind, path in ALL_KEYS:
        key, unit = str(path[-1]), unit_at(CARDS[kind], path)
        bare = (
            key.removesuffix("_min").removesuffix("_max")
            if key not in ("approach_mm_min", "return_mm_min")
            else key
        )
        suffixes = [end for end in UNIT_OF_SUFFIX for name in (key, bare) if name.endswith(end)]
        if not suffixes or key in NO_UNIT:
            continue
        allowed = {UNIT_OF_SUFFIX[end] for end in suffixes}
        assert unit in allowed, (kind, path, unit, allowed)


def test_a_number_without_a_unit_is_one_that_has_none():
    for kind, path in ALL_KEYS:
        if allowed_at(CARDS[kind], path).startswith(("a number", "a whole number")):
            key = str(path[-1])
            assert unit_at(CARDS[kind], path) or key in NO_UNIT or "column" in key, (kind, path)


def test_every_pattern_has_words():
    def patterns(node: object) -> Iterator[str]:
        if isinstance(node, Mapping):
            if isinstance(node.get("pattern"), str):
                yield str(node["pattern"])
            for child in node.values():
                yield from patterns(child)
        if isinstance(node, list | tuple):
            for child in node:
                yield from patterns(child)

    assert set(patterns(all_schemas())) == set(PATTERN_WORDS)


def test_the_page_is_what_the_code_says():
    """Make it again with: python -m daq.cards.doc > docs/cards.md"""
    assert PAGE.read_text(encoding="utf-8") == cards_markdown()


def test_the_page_has_a_row_for_every_key():
    rows = {line.split("|")[1].strip() for line in cards_markdown().splitlines() if line.startswith("| `")}
    assert {f"`{path[-1]}`" for _, path in ALL_KEYS if isinstance(path[-1], str)} <= rows


def test_an_unknown_key_has_no_description():
    assert about_at(CARDS["frame"], ("nothing",)) == ""
    assert allowed_at(CARDS["frame"], ("nothing", "below")) == "no such key"
    assert keys_at(CARDS["frame"], ("nothing",)) == ()
    assert unit_at(CARDS["frame"], ("links", 0, "nothing")) == ""
