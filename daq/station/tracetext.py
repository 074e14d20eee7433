"""Trace text: the trace so far as JSON for late joiners. What was encoded once is not encoded again. Pure."""

from __future__ import annotations

import json
from collections.abc import Mapping

from daq.stream.block import Floats


class TraceText:
    """Ask it again and again for a trace that grows; a new generation begins anew."""

    def __init__(self) -> None:
        self._generation = -1
        self._rows = 0
        self._texts: dict[str, str] = {}

    def json(self, generation: int, columns: Mapping[str, Floats]) -> str:
        """{"name": [values]}; NaN and infinity are null. columns: (n,) each; of one generation n only grows."""
        if generation != self._generation or list(columns) != list(self._texts):
            self._generation, self._rows = generation, 0
            self._texts = dict.fromkeys(columns, "")
        for name, column in columns.items():
            news = json.dumps([finite(value) for value in column[self._rows :].tolist()])[1:-1]
            self._texts[name] = ", ".join(part for part in (self._texts[name], news) if part)
        self._rows = len(next(iter(columns.values()))) if columns else 0
        return "{" + ", ".join(f"{json.dumps(name)}: [{text}]" for name, text in self._texts.items()) + "}"


def finite(value: float) -> float | None:
    """Of NaN and infinity JSON knows nothing."""
    return float(value) if value == value and abs(value) != float("inf") else None
