"""Update: what a viewer receives. One header (JSON) and, for traces, float64 columns as bytes. Pure.

Updates are numbered by the station; a viewer that sees a jump knows how many it lost. Kinds:
look (everything a late joiner needs), state, summary, trace, event, result.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from daq.stream.block import Floats

KINDS = ("look", "state", "summary", "trace", "event", "result")
COLUMNS_MAX = 16


@dataclass(frozen=True, slots=True, eq=False)
class Update:
    """number: counts up by one for each update of this station; columns: name -> (n,) float64, traces only."""

    number: int
    kind: str
    frame: str
    utc: str
    simulated: bool
    body: Mapping[str, Any] = field(default_factory=dict)
    columns: Mapping[str, Floats] = field(default_factory=dict)


def encode(update: Update) -> list[bytes]:
    """[kind, header JSON, column bytes] for a multipart message."""
    assert update.kind in KINDS and len(update.columns) <= COLUMNS_MAX
    rows = len(next(iter(update.columns.values()))) if update.columns else 0
    header = {
        "update": update.number,
        "kind": update.kind,
        "frame": update.frame,
        "utc": update.utc,
        "simulated": update.simulated,
        "body": update.body,
        "columns": list(update.columns),
        "rows": rows,
    }
    data = b"".join(np.ascontiguousarray(column, dtype="<f8").tobytes() for column in update.columns.values())
    return [update.kind.encode(), json.dumps(header, separators=(",", ":")).encode(), data]


def decode(parts: list[bytes]) -> Update:
    """The inverse of encode. Raises ValueError on anything else."""
    if len(parts) != 3:
        raise ValueError(f"an update has 3 parts, not {len(parts)}")
    header = json.loads(parts[1])
    names, rows = header["columns"], int(header["rows"])
    if len(parts[2]) != 8 * rows * len(names):
        raise ValueError("the columns do not fit the header")
    table = np.frombuffer(parts[2], dtype="<f8").reshape(len(names), rows)
    columns = {name: table[place] for place, name in enumerate(names)}
    return Update(
        header["update"],
        header["kind"],
        header["frame"],
        header["utc"],
        header["simulated"],
        header["body"],
        columns,
    )
