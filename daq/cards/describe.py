"""What a key may hold, in words, read from the models' own JSON Schema: one source for all texts."""

from __future__ import annotations

from collections.abc import Mapping
from functools import cache
from typing import TypeAlias

from daq.cards.base import Card

Path: TypeAlias = tuple[str | int, ...]
Node: TypeAlias = Mapping[str, object]

PATTERN_WORDS = {
    r"^[a-z][a-z0-9-]{0,31}$": "1 to 32 small letters, digits and '-', starting with a letter",
    r"^[A-Za-z0-9][A-Za-z0-9_.-]{0,63}$": "1 to 64 letters, digits, '_', '.' or '-', first a letter or digit",
    r"^([0-9a-fA-F]{2}){1,8}$": "1 to 8 bytes in hexadecimal, such as 'a55a'",
    r"^$|^[0-9]{4}-[0-9]{2}-[0-9]{2}$": "a day as YYYY-MM-DD in quotes, or empty",
}


@cache
def schema_of(model: type[Card]) -> Node:
    """JSON Schema of one card, built once."""
    return model.model_json_schema()


def node_at(model: type[Card], path: Path) -> Node | None:
    """The schema node of a key; None when the card has no such key."""
    root = schema_of(model)
    node: Node | None = root
    for step in path:
        if node is None:
            return None
        node = _child(_resolved(root, node), step)
    return node


def keys_at(model: type[Card], path: Path) -> tuple[str, ...]:
    """Names of the keys a table may hold."""
    node = node_at(model, path)
    if node is None:
        return ()
    return tuple(_mapping(_resolved(schema_of(model), node).get("properties")))


def unit_at(model: type[Card], path: Path) -> str:
    """Unit of a key, empty where it has none."""
    node = node_at(model, path)
    return "" if node is None else str(node.get("unit", ""))


def about_at(model: type[Card], path: Path) -> str:
    """Description of a key."""
    node = node_at(model, path)
    return "" if node is None else str(node.get("description", ""))


def allowed_at(model: type[Card], path: Path) -> str:
    """Allowed values of a key with their unit, in words."""
    node = node_at(model, path)
    if node is None:
        return "no such key"
    unit = unit_at(model, path) or unit_at(model, path[:-1])
    return allowed(_resolved(schema_of(model), node), unit)


def allowed(node: Node, unit: str) -> str:
    """Allowed values of a schema node in words."""
    if "const" in node:
        return _quoted(node["const"])
    if "enum" in node:
        return "one of " + ", ".join(_quoted(choice) for choice in _items(node["enum"]))
    kind = node.get("type")
    if kind in ("number", "integer"):
        words = [
            WORDS[str(kind)],
            *_range(node, "minimum", "maximum", "exclusiveMinimum", "exclusiveMaximum"),
        ]
        return " ".join([*words, unit]).strip()
    if kind == "string":
        return _text(node)
    if kind == "array":
        return "a list" + _length(node, "minItems", "maxItems", "items")
    return WORDS.get(str(kind), "a value")


WORDS = {"number": "a number", "integer": "a whole number", "boolean": "true or false", "object": "a table"}


def _text(node: Node) -> str:
    if node.get("format") == "date":
        return "a day as YYYY-MM-DD without quotes"
    pattern = node.get("pattern")
    if pattern is not None:
        return PATTERN_WORDS[str(pattern)]
    return "text" + _length(node, "minLength", "maxLength", "characters")


def _length(node: Node, low_key: str, high_key: str, noun: str) -> str:
    low, high = node.get(low_key), node.get(high_key)
    if low is not None and low == high:
        return f" of {low} {noun}"
    if low is not None and high is not None:
        return f" of {low} to {high} {noun}"
    if high is not None:
        return f" of at most {high} {noun}"
    return f" of at least {low} {noun}" if low is not None else ""


def _range(node: Node, low: str, high: str, above: str, below: str) -> list[str]:
    if low in node and high in node:
        return [f"from {_number(node[low])} to {_number(node[high])}"]
    signs = ((above, ">"), (low, ">="), (below, "<"), (high, "<="))
    parts = [f"{sign} {_number(node[key])}" for key, sign in signs if key in node]
    return [" and ".join(parts)] if parts else []


def _number(value: object) -> str:
    return f"{value:g}" if isinstance(value, float) and abs(value) < 1e6 else str(value)


def _quoted(value: object) -> str:
    return f"'{value}'" if isinstance(value, str) else str(value)


def _resolved(root: Node, node: Node) -> Node:
    """Follow $ref and the non-null half of `X or null`."""
    options = node.get("anyOf")
    if options is not None:
        node = next(_mapping(option) for option in _items(options) if _mapping(option).get("type") != "null")
    reference = node.get("$ref")
    if reference is None:
        return node
    return _mapping(_mapping(root["$defs"])[str(reference).rsplit("/", 1)[-1]])


def _child(node: Node, step: str | int) -> Node | None:
    if isinstance(step, str):
        found = _mapping(node.get("properties")).get(step)
        return None if found is None else _mapping(found)
    prefix = _items(node.get("prefixItems"))
    if step < len(prefix):
        return _mapping(prefix[step])
    return _mapping(node.get("items")) or None


def _mapping(value: object) -> Node:
    return value if isinstance(value, Mapping) else {}


def _items(value: object) -> tuple[object, ...]:
    return tuple(value) if isinstance(value, list | tuple) else ()
