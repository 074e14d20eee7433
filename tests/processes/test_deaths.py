"""Each process can be killed or frozen at any moment with the stated effect; nothing recorded is lost or doubled."""

from __future__ import annotations

import os
import random
import resource
import signal
import subprocess
import time
from pathlib import Path

import pytest

from daq.record.read import read_meta, read_run
from daq.record.verify import verify
from daq.station.stopline import send_stop
from daq.station.supervisor import Supervisor
from tests.processes.rig import check_whole, records, rig_of, rig_series, stands_still


def test_recorder_and_archivist_killed_again_and_again(tmp_path: Path) -> None:
    """Twenty kills in one bar, at seeded moments: nothing lost, nothing twice."""
    chance = random.Random(20)
    with rig_of(data=tmp_path) as rig:
        rig.begin()
        run_id = rig.start_bar()
        for kill in range(20):
            rig.pump(chance.uniform(0.05, 0.3))
            rig.kill(("recorder", "archivist")[kill % 2])
            rig.pump(0.1)
        report = rig.session.finish(run_id, timeout_s=60)
        assert rig.bench_alive
    check_whole(Path(report["path"]))
    assert verify(Path(report["path"])).accounted
    assert read_meta(Path(report["path"]))["result"]["break_class"] == "sudden break"
    assert len(records(tmp_path)) == 1


def test_station_killed_is_a_controlled_stop_and_the_bar_can_be_loaded_again(tmp_path: Path) -> None:
    with rig_of(data=tmp_path) as rig:
        rig.begin()
        rig.start_bar()
        rig.wait_loading()
        rig.kill("station")
        rig.pump(3.0)
        assert stands_still(rig)
        rig.wait("the sealed record", lambda: bool(records(tmp_path)), 30.0)
        assert read_meta(records(tmp_path)[0])["interrupted"]
        rig.client.sit("Rig")
        look = rig.client.do("series", path=str(rig_series()), sure=True)
        first = look["sitting"]["bars"][0]
        assert first["state"] == "interrupted" and first["loading"] == 1
    check_whole(records(tmp_path)[0])


def test_a_stop_works_while_the_station_is_frozen(tmp_path: Path) -> None:
    with rig_of(data=tmp_path) as rig:
        rig.begin()
        rig.start_bar()
        rig.wait_loading()
        rig.kill("station", signal.SIGSTOP)
        try:
            assert send_stop(rig.frame.name, "test")
            assert stands_still(rig, 1.0)
        finally:
            rig.kill("station", signal.SIGCONT)
        rig.wait("the sealed record", lambda: bool(records(tmp_path)), 30.0)
    events = [event["event"] for event in read_run(records(tmp_path)[0]).events]
    assert "stop_sent" in events and "stopped" in events


@pytest.mark.parametrize("how", [signal.SIGKILL, signal.SIGSTOP], ids=["killed", "frozen"])
def test_a_dead_or_frozen_bench_is_stopped_by_the_stopper(how: int, tmp_path: Path) -> None:
    with rig_of(data=tmp_path) as rig:
        rig.begin()
        rig.start_bar()
        rig.wait_loading()
        rig.kill("bench", how)
        assert stands_still(rig, 2.0)
        if how == signal.SIGSTOP:
            rig.kill("bench", signal.SIGCONT)
            rig.wait("the end of the run", lambda: bool(rig.events("run_closed")), 10.0)
            faults = [event["name"] for event in rig.events("fault")]
            assert "bench_late" in faults
        else:
            assert not rig.supervisor.look()
    if how == signal.SIGKILL:
        assert (tmp_path / ".spool" / rig.frame.name / "running").exists()


def test_after_a_killed_bench_the_next_start_recovers_the_record_and_knows_nothing(tmp_path: Path) -> None:
    with rig_of(data=tmp_path) as rig:
        rig.begin()
        rig.start_bar()
        rig.wait_loading()
        rig.kill("bench")
        rig.pump(0.3)
        rig.supervisor.end()
        with Supervisor(rig.outfit, rig.said.append):
            state = ""
            until_s = time.monotonic() + 10.0
            while time.monotonic() < until_s and not state.startswith("unknown"):
                state = rig.client.look()["state"]["state"]
            assert state == "unknown - look at the frame"
            rig.client.sit("Rig", instead=True)
            rig.client.do("series", path=str(rig_series()), sure=True)
            with pytest.raises(Exception, match="unknown"):
                rig.client.do("mount")
            until_s = time.monotonic() + 20.0
            while not records(tmp_path) and time.monotonic() < until_s:
                time.sleep(0.05)
    (record,) = records(tmp_path)
    check_whole(record)
    assert read_meta(record)["interrupted"]
    assert float(read_run(record).channels["force"].value.max()) > 30.0


def test_a_killed_stopper_stops_the_run_and_blocks_the_next(tmp_path: Path) -> None:
    with rig_of(data=tmp_path) as rig:
        rig.begin()
        run_id = rig.start_bar()
        rig.wait_loading()
        rig.kill("stopper")
        rig.wait("the end of the run", lambda: bool(rig.events("run_closed")), 10.0)
        assert stands_still(rig)
        rig.session.finish(run_id, timeout_s=30.0)
        with pytest.raises(Exception, match="stopper"):
            rig.client.do("mount")


def test_a_pulled_cable_is_signal_lost_and_the_file_is_closed(tmp_path: Path) -> None:
    with rig_of(data=tmp_path) as rig:
        rig.begin()
        rig.start_bar()
        rig.wait_loading()
        rig.simulator.kill()
        rig.wait("the end of the run", lambda: bool(rig.events("run_closed")), 10.0)
        assert rig.events("run_closed")[-1]["verdict"].startswith("signal lost")
        rig.wait("the sealed record", lambda: bool(records(tmp_path)), 30.0)
    (record,) = records(tmp_path)
    check_whole(record)
    meta = read_meta(record)
    assert meta["interrupted"] and meta["result"]["stress_survived_mpa"] > 20.0


def test_a_disk_that_is_full_to_the_end_leaves_ring_and_mark_and_the_next_start_has_it_all(
    tmp_path: Path,
) -> None:
    """No byte can be written from the middle of the bar on: the rest lies in the ring only, and is said to."""
    with rig_of(data=tmp_path) as rig:
        rig.begin()
        rig.start_bar()
        rig.wait_loading()
        resource.prlimit(rig.supervisor.pids["recorder"], resource.RLIMIT_FSIZE, (0, resource.RLIM_INFINITY))
        rig.wait("the end of the run", lambda: bool(rig.events("run_closed")), 30.0)
        rig.supervisor.end()
        (ring,) = rig.outfit.places.runtime.glob("ring-*")
        farewell = rig.supervisor.farewell(1.0)
        assert str(ring) in farewell and "LOST WITH A REBOOT" in farewell and "make room" in farewell
        assert rig.outfit.places.running_mark.exists() and not records(tmp_path)
        with Supervisor(rig.outfit, rig.said.append) as again:
            assert not again.clean_start
            until_s = time.monotonic() + 20.0
            while not records(tmp_path) and time.monotonic() < until_s:
                time.sleep(0.05)
            assert not ring.exists()
    (record,) = records(tmp_path)
    check_whole(record)
    assert verify(record).accounted and not read_meta(record)["interrupted"]


def test_a_killed_supervisor_takes_all_with_it_in_order(tmp_path: Path) -> None:
    """Life pipes: nobody outlives the supervisor, the crosshead stands, the record can be had."""
    with rig_of(data=tmp_path) as rig:
        rig.begin()
        rig.start_bar()
        rig.wait_loading()
        processes = dict(rig.supervisor.pids)
        rig.supervisor.abandon()
        assert stands_still(rig, 2.0)
        for role, pid in processes.items():
            assert ended(pid, 30.0), role


def ended(pid: int, timeout_s: float) -> bool:
    until_s = time.monotonic() + timeout_s
    while time.monotonic() < until_s:
        try:
            if os.waitpid(pid, os.WNOHANG)[0] == pid:
                return True
        except ChildProcessError:
            return True
        time.sleep(0.02)
    return False


def test_a_second_daemon_for_the_same_frame_is_refused(tmp_path: Path) -> None:
    with (
        rig_of(data=tmp_path) as rig,
        pytest.raises(Exception, match="already served"),
        Supervisor(rig.outfit, rig.said.append),
    ):
        pass


def test_stop_command_leaves_at_once(tmp_path: Path) -> None:
    with rig_of(data=tmp_path) as rig:
        rig.begin()
        rig.start_bar()
        rig.wait("moving", lambda: rig.session.state in ("approaching", "in contact", "seating", "loading"))
        done = subprocess.run(
            [os.path.join(os.path.dirname(os.sys.executable), "midspan"), "stop"],
            capture_output=True,
            text=True,
            check=False,
        )
        assert done.returncode == 0 and "STOP sent" in done.stdout, done.stderr
        assert stands_still(rig, 1.0)
