"""A station that was away knows what became of the bars; a disk or a share that hangs or is full holds nothing up."""

from __future__ import annotations

import os
import subprocess
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

from daq.errors import Refused
from daq.record.read import read_run
from daq.station.client import Client
from tests.processes.rig import Rig, records, rig_of, rig_series


def bars_of(rig: Rig) -> list[dict[str, Any]]:
    """Take the seat, whoever has it, and open the series: what became of the bars."""
    rig.client.sit("Rig", instead=True)
    bars: list[dict[str, Any]] = rig.client.do("series", path=str(rig_series()), sure=True)["sitting"]["bars"]
    return bars


def test_a_bar_whose_record_cannot_be_sealed_yet_is_not_offered_again(tmp_path: Path) -> None:
    """And who took the seat over meanwhile stands in that record."""
    with rig_of(data=tmp_path) as rig:
        rig.begin()
        run_id = rig.start_bar()
        rig.wait_loading()
        with Client(rig.outfit.places) as other:
            with pytest.raises(Refused, match="taken by Rig"):
                other.sit("Olaf")
            other.sit("Olaf", instead=True)
        (tmp_path / "demo-series").touch()  # where the folder of the records should be
        rig.wait("the end of the run", lambda: bool(rig.events("run_closed")), 30.0)
        rig.pump(0.5)
        rig.kill("station")
        rig.pump(1.5)
        until_s = time.monotonic() + 10.0
        while (first := bars_of(rig)[0])["state"] == "waiting":  # the archivist speaks twice a second
            assert time.monotonic() < until_s
        assert first["state"] == "sealing" and first["loading"] == 1
        with pytest.raises(Refused, match="being sealed"):
            rig.client.do("mount", specimen=first["number"])
        assert not records(tmp_path)
        (tmp_path / "demo-series").unlink()
        rig.session.finish(run_id, timeout_s=30.0)
        assert bars_of(rig)[0]["state"] == "broken"
    (record,) = records(tmp_path)
    (taken,) = [event for event in read_run(record).events if event["event"] == "seat_taken"]
    assert taken["operator"] == "Olaf" and taken["before"] == "Rig" and taken["time_s"] > 0.0


def test_a_data_folder_that_hangs_holds_up_nobody_else(tmp_path: Path) -> None:
    """A named pipe among the records stands for a share that has gone: whoever opens it waits in the kernel."""
    with rig_of(data=tmp_path) as rig:
        folder = tmp_path / "demo-series"
        folder.mkdir()
        os.mkfifo(folder / "demo-series_DEMO-01_01.h5")
        answered: list[Any] = []

        def open_series() -> None:
            with Client(rig.outfit.places) as mine:
                mine.sit("Rig")
                answered.append(mine.do("series", path=str(rig_series()), sure=True)["sitting"]["bars"][0])

        waiting = threading.Thread(target=open_series)
        waiting.start()
        rig.wait("the seat", lambda: bool(rig.client.look()["state"]["operator"]), 10.0)
        rig.pump(1.5)
        assert rig.client.look()["state"]["operator"] == "Rig" and not answered
        assert not [event for event in rig.events("fault") if event["name"] == "station_silent"]
        with (folder / "demo-series_DEMO-01_01.h5").open("w"):
            pass
        waiting.join(20.0)
        assert answered and "does not read" in answered[0]["result"]["problem"]


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of 64 MB, where this computer lets us have one."""
    folder = tmp_path / "small"
    folder.mkdir()
    mount = ["mount", "-t", "tmpfs", "-o", "size=64M", "midspan-test", str(folder)]
    if os.geteuid() != 0 or subprocess.run(mount, capture_output=True, check=False).returncode != 0:
        pytest.skip("only a superuser may mount a small disk")
    yield folder
    subprocess.run(["umount", "-l", str(folder)], check=True)


def test_a_disk_that_gets_full_is_told_and_blocks_the_next_bar(small_disk: Path) -> None:
    with rig_of(data=small_disk) as rig:
        rig.begin()
        with (small_disk / "heap").open("wb") as heap:
            free = os.statvfs(small_disk)
            heap.write(bytes(max(0, free.f_bavail * free.f_frsize - (2 << 20))))
        rig.wait("the fault", lambda: bool(rig.events("fault")), 20.0)
        (fault,) = rig.events("fault")
        assert (
            fault["name"] == "disk_low" and "make room" in fault["detail"] and fault["severity"] == "caution"
        )
        with pytest.raises(Refused, match="make room"):
            rig.client.do("mount")
