"""Every event that the bench writes has a meaning in one of the two catalogues, and no meaning is without its event."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

from daq.bench.catalogue import BENCH_EVENTS
from daq.watch.catalogue import EVENTS

ROOT = Path(__file__).resolve().parents[2]
SOURCES = [*sorted((ROOT / "daq" / "bench").glob("*.py")), ROOT / "daq" / "stream" / "ring.py"]


def names_in(path: Path) -> Iterator[str]:
    """First arguments of note(...) and Event(...), and "event": "..." of a mapping."""
    for node in ast.walk(ast.parse(path.read_text("utf-8"))):
        if (
            isinstance(node, ast.Call)
            and ast.unparse(node.func).split(".")[-1] in ("note", "Event")
            and node.args
        ):
            if isinstance(node.args[0], ast.Constant):
                yield str(node.args[0].value)
        elif isinstance(node, ast.Dict):
            for key, value in zip(node.keys, node.values, strict=True):
                if isinstance(key, ast.Constant) and key.value == "event" and isinstance(value, ast.Constant):
                    yield str(value.value)


def test_events_and_meanings_belong_together() -> None:
    written = {name for path in SOURCES for name in names_in(path)}
    assert written == BENCH_EVENTS.keys()
    assert not BENCH_EVENTS.keys() & EVENTS.keys()
    assert all(meaning.endswith(".") for meaning in BENCH_EVENTS.values())
