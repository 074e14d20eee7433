"""Sealed records of virtual bars: the whole way from the virtual bench through a journal and its sealing."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from daq.record.recover import recover
from daq.results.reduce import result_mapping
from daq.stream.entry import Entry
from daq.stream.journal import Journal
from simulator.scenario import VirtualBench
from tests.scenarios.world import bar, bars_of, break_one, frame_of, lay, method_of

SEGMENT_BYTES = 1 << 20


def sealed(folder: Path, entries: list[Entry]) -> tuple[Path, ...]:
    """Every run of these entries as a sealed record, as the archivist and recovery make them."""
    journal = Journal.create(folder / "journal-1", entries[0].stream_id, segment_bytes=SEGMENT_BYTES)
    for first in range(0, len(entries), 500):
        journal.append(entries[first : first + 500])
    journal.close()
    return recover(folder / "journal-1", folder / "records", reduce=result_mapping)


def broken_bar(
    *, rate_hz: float = 100.0, seed: int = 1, speed_mm_min: float | None = None, **frame: Any
) -> list[Entry]:
    """The entries of one alumina bar, from the start of the bench to the end of the run."""
    bench = VirtualBench(frame_of(rate_hz=rate_hz, **frame), bars_of(seed=seed))
    lay(bench, bar())
    assert break_one(bench, method_of(), bar())
    return bench.entries
