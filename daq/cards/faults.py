"""Fault: one thing that is wrong with a card, told in one line that is complete in itself.

file: key = value: allowed range with unit: what to do
"""

from __future__ import annotations

import datetime as dt
import difflib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from pydantic import ValidationError
from pydantic_core import ErrorDetails

from daq.cards.base import Card
from daq.cards.describe import Path, about_at, allowed_at, keys_at
from daq.errors import CardError

VALUE_CHARACTERS_MAX = 60
FAULTS_SHOWN_MAX = 100


@dataclass(frozen=True, slots=True)
class Fault:
    """allowed: what may stand there, with unit; do: what to do; value: shown instead of what stands there."""

    path: Path
    allowed: str
    do: str
    value: str | None = None

    def line(self, file: str, tree: Mapping[str, object]) -> str:
        """The one line for people."""
        value = show(_look_up(tree, self.path)) if self.value is None else self.value
        return f"{one_line(file)}: {key_text(self.path, tree)} = {value}: {self.allowed}: {self.do}"


def raise_faults(lines: Iterable[str]) -> None:
    """CardError with all lines, when there are any; a flood is cut and its size told."""
    found = tuple(dict.fromkeys(lines))
    if not found:
        return
    if len(found) > FAULTS_SHOWN_MAX:
        rest = len(found) - FAULTS_SHOWN_MAX
        found = (*found[:FAULTS_SHOWN_MAX], f"and {rest} more faults: correct these first")
    raise CardError(found)


def faults_of(error: ValidationError, model: type[Card], at: Path = ()) -> tuple[Fault, ...]:
    """Every field fault that pydantic found, in our words."""
    details = error.errors(include_url=False)
    return tuple(_fault(detail, model, at) for detail in details if not _only_follows(detail))


def _only_follows(detail: ErrorDetails) -> bool:
    """A list that is called too short only because its items are faulty."""
    value = detail["input"]
    return detail["type"] == "too_short" and len(value) >= detail["ctx"]["min_length"]


def _fault(detail: ErrorDetails, model: type[Card], at: Path) -> Fault:
    path = detail["loc"]
    if detail["type"] == "missing":
        return Fault(
            (*at, *path), f"{about_at(model, path)} ({allowed_at(model, path)})", "add this key", "(missing)"
        )
    if detail["type"] == "extra_forbidden":
        return Fault((*at, *path), "not a key of this table", _closest(model, path))
    if detail["type"] == "value_error":
        return Fault((*at, *path), str(detail["ctx"]["error"]), "choose another text")
    return Fault((*at, *path), allowed_at(model, path), _what_to_do(detail))


def _what_to_do(detail: ErrorDetails) -> str:
    kind, value = detail["type"], detail["input"]
    if kind in ("float_type", "int_type") and isinstance(value, str):
        return "write the number without quotes and without a unit; the unit is in the name of the key"
    if kind in (
        "date_type",
        "string_type",
        "tuple_type",
        "model_type",
        "bool_type",
        "float_type",
        "int_type",
    ):
        return "write it in this form"
    if kind == "literal_error":
        return "choose one of these"
    if kind == "finite_number":
        return "write a finite number"
    return "correct it, or leave the key out where a default is meant"


def _closest(model: type[Card], path: Path) -> str:
    known = keys_at(model, path[:-1])
    near = difflib.get_close_matches(str(path[-1]), known, n=1, cutoff=0.6)
    if near:
        return f"did you mean {near[0]}?"
    return "remove it; known keys are " + ", ".join(known)


def key_text(path: Path, tree: object) -> str:
    """links[main].rate_hz: items of a list by their name, else by their place counted from 1."""
    text = ""
    for step in path:
        tree = _step(tree, step)
        if isinstance(step, int):
            name = _step(tree, "name")
            text += f"[{one_line(name)}]" if isinstance(name, str) and name else f"[#{step + 1}]"
        else:
            text += ("." if text else "") + one_line(step)
    return text or "the card"


def show(value: object) -> str:
    """A value as it would stand in the card, on one line, bounded."""
    if value is None:
        return "(missing)"
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, dt.date | dt.time):
        return value.isoformat()
    if isinstance(value, Mapping):
        return "(a table)"
    if isinstance(value, list | tuple):
        return f"(a list of {len(value)})"
    if isinstance(value, int) and abs(value) >= 10**18:
        return "(a very long number)"
    text = repr(value)
    return text if len(text) <= VALUE_CHARACTERS_MAX else text[: VALUE_CHARACTERS_MAX - 3] + "..."


def one_line(text: str) -> str:
    """Text without anything that could break a line or a terminal; bounded."""
    shown = text if text.isprintable() else repr(text)[1:-1]
    return shown if len(shown) <= 200 else shown[:197] + "..."


def _look_up(tree: object, path: Path) -> object:
    for step in path:
        tree = _step(tree, step)
    return tree


def _step(tree: object, step: str | int) -> object:
    if isinstance(tree, Mapping) and isinstance(step, str):
        return tree.get(step)
    if isinstance(tree, list | tuple) and isinstance(step, int) and step < len(tree):
        return tree[step]
    return None
