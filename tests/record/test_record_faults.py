"""The n-th call fails, for every n: of the writes of a seal, and of the other file calls on the way to a record."""

from __future__ import annotations

import errno
import os
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import h5py
import pytest

from daq.record.archivist import Archivist
from daq.record.columns import Columns
from daq.record.follow import Follower, Opened, Within
from daq.record.mark import MARK_NAME
from daq.record.seal import Before, Outcome, write_record
from daq.record.verify import check_contents
from daq.stream.entry import Entry, pack_all
from tests.record.synthetic_run import demo_entries, demo_reduce

Make = Callable[[Path, list[Entry]], Path]


class Failing:
    """A call of the operating system that fails from the n-th on, `times` times."""

    def __init__(self, monkeypatch: pytest.MonkeyPatch, name: str, nth: int, times: int, error: int) -> None:
        self.calls = 0
        real = getattr(os, name)

        def call(*args: Any, **kwargs: Any) -> Any:
            self.calls += 1
            if nth <= self.calls < nth + times:
                raise OSError(error, os.strerror(error))
            return real(*args, **kwargs)

        monkeypatch.setattr(os, name, call)


def columns_of(entries: list[Entry], folder: Path) -> Columns:
    made: Columns | None = None
    for found in Follower().feed(pack_all(entries)):
        if isinstance(found, Opened):
            made = Columns(folder, found.head, found.lead_in)
        elif isinstance(found, Within):
            assert made is not None
            made.add(found.entry, found.packed)
    assert made is not None
    made.finish()
    return made


@pytest.mark.slow
@pytest.mark.parametrize("times", [1, 10**9], ids=["once", "for ever"])
def test_any_failed_write_of_a_seal_is_an_error_and_leaves_no_file(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, times: int
) -> None:
    columns = columns_of(demo_entries(steps=40), tmp_path / "scratch")
    path = tmp_path / "record.h5"
    with monkeypatch.context() as patch:
        counted = Failing(patch, "pwrite", 0, 0, 0)
        write_record(path, columns, Outcome(), Before())
    assert check_contents(path).ok and counted.calls > 50
    path.unlink()
    for nth in range(1, counted.calls + 1, 17):
        with monkeypatch.context() as patch:
            Failing(patch, "pwrite", nth, times, errno.ENOSPC)
            with pytest.raises(OSError, match="No space"):
                write_record(path, columns, Outcome(), Before())
        assert not path.exists(), f"write {nth}"
    write_record(path, columns, Outcome(), Before())
    assert check_contents(path).ok
    columns.remove()


@pytest.mark.slow
@pytest.mark.parametrize("name", ["fsync", "link", "unlink", "replace", "open", "statvfs"])
def test_any_failed_call_is_told_and_the_record_comes_later(
    name: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, make_journal: Make
) -> None:
    journal = make_journal(tmp_path / "j", demo_entries(steps=20))
    expected: bytes | None = None
    nth = 0
    while True:
        work = tmp_path / f"w{nth}"
        said: list[Mapping[str, Any]] = []
        (journal / MARK_NAME).unlink(missing_ok=True)
        with (
            Archivist(journal, work / "out", work / "spool", demo_reduce, said.append) as archivist,
            monkeypatch.context() as patch,
        ):
            failing = Failing(patch, name, nth, 1 if nth else 0, errno.EIO)
            for second in range(20):
                archivist.advance(float(second))
        (path,) = (work / "out").rglob("*.h5")
        expected = expected or path.read_bytes()
        assert path.read_bytes() == expected, f"{name} {nth}"
        assert "sealed" in {report["report"] for report in said}
        assert [place.name for place in path.parent.iterdir() if place.name.startswith(".")] == []
        if failing.calls < nth or nth > 7:
            break
        nth += 1
    assert nth > 1, f"{name} is never called: the test would prove nothing"


def test_a_trace_without_stress_shows_the_force_that_is_there(tmp_path: Path) -> None:
    columns = columns_of(demo_entries(steps=5), tmp_path / "scratch")
    trace = {"deflection_mm": [0.0, 1.0], "time_s": [0.0, 0.1], "force_net_n": [1.0, 2.0]}
    write_record(tmp_path / "record.h5", columns, Outcome(trace=trace), Before())  # type: ignore[arg-type]
    columns.remove()
    with h5py.File(tmp_path / "record.h5", "r") as file:
        attrs = file["trace"].attrs
        assert (bytes(attrs["signal"]), bytes(attrs["axes"])) == (b"force_net_n", b"deflection_mm")
