"""SIGKILL at any moment: the next archivist finishes, and every record is the same bytes as without the kill."""

from __future__ import annotations

import os
import random
import shutil
import signal
import sys
import time
from collections.abc import Callable, Mapping
from pathlib import Path

import pytest

from daq.record.archivist import run_archivist
from daq.record.mark import MARK_NAME
from daq.record.publish import SUMS_NAME
from daq.record.recover import recover
from tests.record.synthetic_run import demo_reduce

pytestmark = [pytest.mark.slow, pytest.mark.processes]

Work = Callable[[], object]


def killed(work: Work, kill: Callable[[int], None]) -> bool:
    """Do the work in a child; whether it was killed before its end."""
    child = os.fork()
    if child == 0:
        try:
            work()
            os._exit(0)
        finally:
            os._exit(1)
    kill(child)
    _, status = os.waitpid(child, 0)
    assert os.WIFSIGNALED(status) or os.WEXITSTATUS(status) == 0
    return os.WIFSIGNALED(status)


def dying_at(step: int, work: Work) -> Work:
    """The same work, killed when it asks the system for its step-th file operation."""

    def dies() -> None:
        left = step

        def count(event: str, _: tuple[object, ...]) -> None:
            nonlocal left
            if event in ("open", "os.rename", "os.link", "os.remove", "os.rmdir", "os.mkdir", "fcntl.flock"):
                left -= 1
                if left == 0:
                    os.kill(os.getpid(), signal.SIGKILL)

        sys.addaudithook(count)
        work()

    return dies


def nothing(_: Mapping[str, object]) -> None:
    pass


def archive(folder: Path) -> Work:
    """Follow the whole journal, then end."""
    return lambda: run_archivist(
        folder / "j", folder / "out", folder / "spool", demo_reduce, nothing, lambda: True
    )


def rescue(folder: Path) -> Work:
    return lambda: recover(folder / "j", folder / "out", reduce=demo_reduce)


def files(folder: Path) -> dict[str, bytes]:
    return {str(path.relative_to(folder)): path.read_bytes() for path in folder.rglob("*") if path.is_file()}


def place(folder: Path, journal: Path) -> Path:
    shutil.rmtree(folder, ignore_errors=True)
    folder.mkdir()
    shutil.copytree(journal, folder / "j", ignore=shutil.ignore_patterns(MARK_NAME))
    return folder


def undisturbed(records: tuple[Path, ...]) -> dict[str, bytes]:
    return files(records[0].parents[1])


def wait_for(child: int) -> None:
    """Let it run to its end or its own kill."""


def test_killed_at_every_few_file_operations(
    tmp_path: Path, journal: Path, records: tuple[Path, ...]
) -> None:
    """Twice: the archivist dies, then the recovery dies a little further on, then a recovery is left alone."""
    expected = undisturbed(records)
    step, died = 1, 0
    while True:
        folder = place(tmp_path / "w", journal)
        if not killed(dying_at(step, archive(folder)), wait_for):
            break
        died += 1
        if killed(dying_at(step + 2, rescue(folder)), wait_for):
            rescue(folder)()
        assert files(folder / "out") == expected, f"killed at file operation {step}"
        assert not (folder / "j").exists()
        step += 8
    assert died > 8, "the work must be long enough for the kills to mean something"


def test_killed_at_random_moments(tmp_path: Path, journal: Path, records: tuple[Path, ...]) -> None:
    expected = undisturbed(records)
    chance = random.Random(31)
    for attempt in range(8):
        folder = place(tmp_path / "w", journal)

        def kill_soon(child: int) -> None:
            time.sleep(
                chance.uniform(0.0, 0.3)
            )  # the moment of the kill is what is tried, nothing waits for it
            os.kill(child, signal.SIGKILL)

        if killed(archive(folder), kill_soon):
            killed(rescue(folder), kill_soon)
        if (folder / "j").exists():
            rescue(folder)()
        assert files(folder / "out") == expected, f"attempt {attempt}"


def test_recovering_again_changes_nothing(tmp_path: Path, journal: Path, records: tuple[Path, ...]) -> None:
    folder = place(tmp_path / "w", journal)
    for _ in range(2):
        found = recover(folder / "j", folder / "out", reduce=demo_reduce, keep=True, afresh=True)
        assert [path.name for path in found] == [path.name for path in records]
    assert files(folder / "out") == undisturbed(records)
    assert SUMS_NAME in {path.name for path in (folder / "out" / "kiln").iterdir()}
