"""Memory: what the bench remembers directly before a run is opened, as one JSON value, and back. Pure.

A record begins in the middle of the bench's life: a decoder holds half a row, the clock model half a minute of
arrivals, the watch its noise and its zero. With this beside the opening, the recorded bytes give every block and every
decision again, bit for bit. What follows from the cards is left out: whoever restores has made it from the same cards.

It refuses what it does not know (a dialect from elsewhere, a state of another version): NotKept says which.

    null, true, 1, "text"     themselves          {"enum": [class, name]}
    finite float              itself              {"float": "nan" | "inf" | "-inf"}
    {"bytes": hex}            bytes               {"floats": hex, "by": k}  float64, little-endian; k a tuple, 0: singly
    {"list": [..]}  {"tuple": [..]}  {"set": [..]}  {"deque": [..], "maxlen": n}  {"dict": [[key, value], ..]}
    {"of": class, "with": {attribute: value}}
"""

from __future__ import annotations

import importlib
import re
import struct
from array import array
from collections import deque
from collections.abc import Mapping, Sequence
from enum import Enum
from math import isfinite
from typing import Any

import numpy as np
from pydantic import BaseModel

from daq.errors import MidspanError
from daq.watch.setup import WatchSetup
from drivers.packetform import PacketForm
from drivers.plan import RowPlan
from drivers.rowblock import RowBlock
from drivers.rowtext import RowText

GIVEN = (BaseModel, WatchSetup, RowText, RowBlock, PacketForm, RowPlan, struct.Struct, re.Pattern)
"""What cards alone decide, and what holds nothing that changes."""
OUTSIDE = frozenset({"at_once", "look"})  # hooks of the shell, no state
ROOMS = ("daq.watch.", "daq.stream.", "daq.bench.", "drivers.")
DEPTH_MAX = 24


class NotKept(MidspanError):
    """Something whose state cannot be written down, or that is no state of this version."""


# --- there


def keep(value: object, depth: int = 0) -> Any:
    """The state of a value. NotKept names what is not known."""
    if depth > DEPTH_MAX:
        raise NotKept(f"{type(value).__name__} is nested too deeply")
    if isinstance(value, Enum):
        return {"enum": [_path(type(value)), value.name]}
    if isinstance(value, float):
        return float(value) if isfinite(value) else {"float": repr(float(value))}
    if value is None or isinstance(value, bool | int | str):
        return value
    if isinstance(value, bytes | bytearray):
        return {"bytes": bytes(value).hex()}
    if isinstance(value, list | tuple | deque | set | frozenset | dict):
        return _keep_many(value, depth + 1)
    if not _ours(type(value)):
        raise NotKept(f"{_path(type(value))} is not known here")
    return {
        "of": _path(type(value)),
        "with": {name: keep(getattr(value, name), depth + 1) for name in sorted(_attributes(value))},
    }


def _keep_many(value: Any, depth: int) -> Any:
    if isinstance(value, dict):
        return {"dict": [[keep(key, depth), keep(item, depth)] for key, item in value.items()]}
    if isinstance(value, set | frozenset):
        return {"set": [keep(item, depth) for item in sorted(value, key=repr)]}
    kind = "deque" if isinstance(value, deque) else "tuple" if isinstance(value, tuple) else "list"
    more = {"maxlen": value.maxlen} if isinstance(value, deque) else {}
    if kind != "tuple" and value:
        floats = _keep_floats(value)
        if floats is not None:
            return {kind: floats, **more}
    return {kind: [keep(item, depth) for item in value], **more}


def _keep_floats(values: Sequence[Any]) -> dict[str, Any] | None:
    """The state of numbers in a row, or of tuples of them; the watch remembers thousands."""
    by = len(values[0]) if isinstance(values[0], tuple) else 0
    rows = values if by else [(value,) for value in values]
    if not all(isinstance(row, tuple) and len(row) == max(by, 1) for row in rows):
        return None
    flat = [number for row in rows for number in row]
    if not all(isinstance(number, float) for number in flat):
        return None
    return {"floats": np.array(flat, dtype="<f8").tobytes().hex(), "by": by}


def _attributes(value: object) -> set[str]:
    """Names of what can change in an object of ours."""
    names = set(getattr(value, "__dict__", ()))
    for kind in type(value).__mro__:
        slots = getattr(kind, "__slots__", ())
        names.update((slots,) if isinstance(slots, str) else slots)
    return {
        name
        for name in names - OUTSIDE
        if hasattr(value, name) and not isinstance(getattr(value, name), GIVEN)
    }


# --- and back


def restore(now: object, kept: Any) -> Any:
    """The value that was kept; `now`: the freshly made one in its place, changed where it stands if it can be."""
    if not isinstance(kept, dict):
        return kept
    if "of" in kept:
        return _restore_object(now, kept["of"], kept["with"])
    if "enum" in kept:
        return _class(kept["enum"][0])[kept["enum"][1]]
    if "float" in kept:
        return float(kept["float"])
    if "bytes" in kept:
        return bytes.fromhex(kept["bytes"])
    if "dict" in kept:
        return {restore(None, key): restore(None, item) for key, item in kept["dict"]}
    if "set" in kept:
        return {restore(None, item) for item in kept["set"]}
    for kind in ("tuple", "list", "deque"):
        if kind in kept:
            found = _restore_many(now, kept[kind])
            return (
                {"tuple": tuple, "list": list}[kind](found)
                if kind != "deque"
                else deque(found, kept["maxlen"])
            )
    raise NotKept(f"a state of another version: {sorted(kept)}")


def _restore_many(now: object, kept: Any) -> list[Any]:
    if isinstance(kept, dict):
        flat = array("d", np.frombuffer(bytes.fromhex(kept["floats"]), dtype="<f8").tolist()).tolist()
        by = kept["by"]
        return [tuple(flat[at : at + by]) for at in range(0, len(flat), by)] if by else flat
    beside = list(now) if isinstance(now, list) and len(now) == len(kept) else [None] * len(kept)
    return [restore(old, item) for old, item in zip(beside, kept, strict=True)]


def _restore_object(now: object, path: str, attributes: Mapping[str, Any]) -> object:
    """In place where a fresh one of that class stands there, so that who else refers to it sees it too."""
    kind = _class(path)
    frozen = getattr(getattr(kind, "__dataclass_params__", None), "frozen", False)
    fresh = now if type(now) is kind and not frozen else None
    target = object.__new__(kind) if fresh is None else fresh
    for name, kept in attributes.items():
        if fresh is not None and not hasattr(fresh, name):
            raise NotKept(f"{path} has no {name} in this version")
        object.__setattr__(target, name, restore(getattr(target, name, None), kept))
    unknown = sorted(_attributes(target) - attributes.keys())
    missing = [name for name in getattr(kind, "__dataclass_fields__", ()) if not hasattr(target, name)]
    if unknown or missing:
        raise NotKept(f"{path} has {', '.join(unknown + missing)} in this version, which was not kept")
    return target


def _class(path: str) -> type[Any]:
    module, _, name = path.rpartition(".")
    if not path.startswith(ROOMS):
        raise NotKept(f"{path} is no state of the bench")
    try:
        found = getattr(importlib.import_module(module), name)
    except (ImportError, AttributeError):
        raise NotKept(f"{path} is not there in this version") from None
    if not isinstance(found, type) or _path(found) != path:
        raise NotKept(f"{path} is no state of the bench")
    return found


def _path(kind: type) -> str:
    return f"{kind.__module__}.{kind.__qualname__}"


def _ours(kind: type) -> bool:
    return _path(kind).startswith(ROOMS)
