"""Texts: how words, single numbers and JSON go into HDF5 so that every tool reads them. No layout here."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from typing import Any, TypeAlias

import h5py
import numpy as np

H5: TypeAlias = Any  # h5py carries no types


def set_text(target: H5, name: str, text: str) -> None:
    """A text attribute of fixed length."""
    target.attrs[name] = fixed_text(text)


def fixed_text(text: str) -> H5:
    raw = utf8(text) or b" "
    return np.array(raw, dtype=h5py.string_dtype("utf-8", len(raw)))


def utf8(text: str) -> bytes:
    """A lone surrogate becomes its JSON escape, as in the entries."""
    return text.encode("utf-8", "backslashreplace")


def plain_text(raw: H5) -> str:
    """What a fixed-length text reads back as."""
    return bytes(raw).rstrip(b"\0").decode("utf-8").rstrip(" ")


def set_plain(target: H5, key: str, value: object) -> None:
    """A number or a text as an attribute; anything else is left to the JSON beside it."""
    if isinstance(value, bool):
        target.attrs[key] = np.uint8(value)
    elif isinstance(value, int | float):
        target.attrs[key] = np.float64(value)
    elif isinstance(value, str):
        set_text(target, key, value)


def set_plain_all(target: H5, values: Mapping[str, Any]) -> None:
    for key, value in values.items():
        if not (isinstance(value, str) and len(value) > 1000):
            set_plain(target, key, value)


def json_text(value: object) -> str:
    """JSON in one line with sorted keys; numbers that JSON does not know become null."""
    try:
        return json.dumps(value, allow_nan=False, ensure_ascii=False, sort_keys=True, default=_plain)
    except ValueError:
        return json.dumps(_finite(value), ensure_ascii=False, sort_keys=True, default=_plain)


def _plain(value: object) -> object:
    if isinstance(value, np.generic | np.ndarray):
        return _finite(value.tolist())
    if isinstance(value, Mapping):
        return dict(value)
    return str(value)


def _finite(value: object) -> object:
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {str(key): _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    return value
