"""Journals and records that several tests of this folder look at; each is made once and never altered."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from daq.record.recover import recover
from daq.stream.entry import Entry
from daq.stream.journal import Journal
from tests.record.synthetic_run import SyntheticBench, demo_reduce

SEGMENT_BYTES = 1 << 18


def write_journal(folder: Path, entries: list[Entry], *, batch: int = 50) -> Path:
    journal = Journal.create(folder, entries[0].stream_id, segment_bytes=SEGMENT_BYTES)
    for first in range(0, len(entries), batch):
        journal.append(entries[first : first + batch])
    journal.close()
    return folder


@pytest.fixture(scope="session")
def make_journal() -> Callable[[Path, list[Entry]], Path]:
    return write_journal


@pytest.fixture(scope="session")
def two_runs() -> list[Entry]:
    """Idle, bar A01, idle, bar A02 cut off without a run_closed."""
    bench = SyntheticBench()
    return [*bench.idle(40), *bench.run("A01"), *bench.idle(40), *bench.run("A02", steps=60, closed=False)]


@pytest.fixture(scope="session")
def journal(tmp_path_factory: pytest.TempPathFactory, two_runs: list[Entry]) -> Path:
    return write_journal(tmp_path_factory.mktemp("journal") / "j", two_runs)


@pytest.fixture(scope="session")
def records(tmp_path_factory: pytest.TempPathFactory, journal: Path) -> tuple[Path, ...]:
    """Both runs of that journal as nobody has disturbed their making."""
    mine = tmp_path_factory.mktemp("own") / "j"  # a mark in the journal of all would be seen by all
    shutil.copytree(journal, mine)
    return recover(mine, tmp_path_factory.mktemp("out"), reduce=demo_reduce, keep=True, afresh=True)


@pytest.fixture(scope="session")
def record(records: tuple[Path, ...]) -> Path:
    return records[0]
