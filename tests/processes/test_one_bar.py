"""One bar from the wire to the sealed record, with all processes real: pty and text lines, TCP and binary packets."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest

from daq.cli.commands.demo import clear_the_way
from daq.record.read import read_meta, read_run
from daq.record.verify import verify
from daq.station.stopline import send_stop
from tests.processes.rig import rig_of, truths


@pytest.mark.parametrize("frame_card", ["kiln-lane-demo.toml", "kiln-lane-b.toml"])
def test_a_bar_is_broken_stopped_sealed_and_true(frame_card: str, tmp_path: Path) -> None:
    with rig_of(frame_card, data=tmp_path) as rig:
        rig.begin()
        report = rig.session.finish(rig.start_bar(), timeout_s=60)
        truth = truths(rig.folder)
        assert rig.client.lost_updates == 0
    record = Path(report["path"])
    checked = verify(record)
    assert checked.ok and checked.accounted, checked.problems
    result = read_meta(record)["result"]
    grave = [event for event in read_run(record).events if event["severity"] != "remark"]
    assert result["break_class"] == "sudden break", grave
    broke = next(fact for fact in truth if fact["what"] == "broke")
    assert result["peak_recovered_n"] == pytest.approx(broke["fields"]["force_n"], rel=1e-3)
    assert result["stress_rate_mean_mpa_s"] == pytest.approx(93.0, rel=0.05)
    names = [event["event"] for event in read_run(record).events]
    for name in (
        "tared",
        "ready",
        "started",
        "approach_touch",
        "seated",
        "fracture",
        "stopped",
        "run_closed",
    ):
        assert name in names
    reads_without_midspan(record)


def reads_without_midspan(record: Path) -> None:
    """Any HDF5 tool reads the record: here h5py in a process that has never seen midspan."""
    script = (
        "import h5py, json, sys\n"
        "file = h5py.File(sys.argv[1])\n"
        "force = file['channels/force/value']\n"
        "trace = file[file.attrs['default'].decode()]\n"
        "print(json.dumps([float(force[:].max()), int(file.attrs['simulated']), trace.attrs['NX_class'].decode(),"
        " file[file.attrs['default'].decode()][trace.attrs['signal'].decode()].shape[0]]))\n"
        "assert not any(name.startswith(('daq', 'drivers')) for name in sys.modules)\n"
    )
    done = subprocess.run(
        [sys.executable, "-I", "-c", script, str(record)], capture_output=True, text=True, check=True
    )
    highest_n, simulated, kind, rows = json.loads(done.stdout)
    assert highest_n > 250 and simulated == 1 and kind == "NXdata" and rows > 1000


def test_the_demonstration_goes_on_after_a_stop_that_came_when_the_bar_was_done(tmp_path: Path) -> None:
    with rig_of(data=tmp_path) as rig:
        rig.begin()
        rig.start_bar()
        rig.wait("motion", lambda: rig.session.state == "approaching")
        assert send_stop(rig.frame.name, "test")
        rig.wait(
            "the end of the run",
            lambda: rig.session.state == "stopped" and bool(rig.events("run_closed")),
            20.0,
        )
        clear_the_way(rig.session, rig.client, rig.hands_path)
        assert rig.session.state == "at rest"
        clear_the_way(rig.session, rig.client, rig.hands_path)  # nothing to clear: nothing is done
        assert len(rig.events("reset")) == 1
