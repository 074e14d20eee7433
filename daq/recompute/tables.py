"""Tables: results of many records as one CSV or JSON text, units in the column names. Pure."""

from __future__ import annotations

import csv
import io
import json
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from daq.recompute.one import Recomputed

FIRST = ("path", "same", "damage", "series", "specimen", "loading", "created_utc", "simulated", "sha256")


def row_of(found: Recomputed) -> dict[str, Any]:
    """One record as plain values: who it is, whether it came out the same, and every single number of the result."""
    named = {
        name: found.meta.get(name) for name in ("series", "specimen", "loading", "created_utc", "simulated")
    }
    numbers = {
        key: value for key, value in found.result.items() if not isinstance(value, Mapping | list | tuple)
    }
    row = {"path": found.path, "same": found.ok, "damage": found.damage, **named, "sha256": found.sha256}
    return {**row, **numbers}


def whole_of(found: Recomputed) -> dict[str, Any]:
    """One record with everything: result, differences, notes."""
    return {
        **{name: row_of(found)[name] for name in FIRST},
        "entries": found.entries,
        "rows": found.rows,
        "decisions_same": found.decisions,
        "result": found.result,
        "differences": [
            {"what": each.what, "stored": each.stored, "recomputed": each.recomputed}
            for each in found.differences
        ],
        "notes": list(found.notes),
    }


def csv_text(rows: Sequence[Mapping[str, Any]]) -> str:
    """A header and a line a row; decimal point, comma, UTF-8; empty where there is no value."""
    columns = list(dict.fromkeys(key for row in rows for key in row))
    text = io.StringIO()
    table = csv.writer(text, lineterminator="\n")
    table.writerow(columns)
    for row in rows:
        table.writerow([_cell(row.get(column)) for column in columns])
    return text.getvalue()


def json_text(values: Iterable[Mapping[str, Any]]) -> str:
    return json.dumps(list(values), ensure_ascii=False, allow_nan=False, indent=1) + "\n"


def _cell(value: object) -> str:
    if value is None:
        return ""
    if isinstance(value, bool):
        return str(int(value))
    return repr(value) if isinstance(value, float) else str(value)
