"""serve, check --live, the two drills and stop as a user calls them, with real processes on a pty."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import time
from pathlib import Path
from typing import Any

import pytest

from daq.cards.load import example_path, load_frame
from daq.cli.options import running_places
from daq.errors import Refused
from daq.station.client import Client
from daq.station.proofs import KINDS, POLARITY, write_proof
from tests.cli.lane import Lane, lane_of
from tests.cli.typed import typed

pytestmark = [pytest.mark.slow, pytest.mark.processes]
DEMO = "kiln-lane-demo.toml"
SERIES = str(example_path("demo-series.toml"))
REAL = {"simulated = true": "simulated = false"}


def ended(daemon: subprocess.Popen[str], how: signal.Signals) -> str:
    """End a daemon; what it said last. It must have ended in order."""
    daemon.send_signal(how)
    _, said = daemon.communicate(timeout=30)
    assert daemon.returncode == 0 and f"{how.name}: ending" in said, said
    return said


def test_live_look_then_serve_ends_in_order_and_leaves_nothing_but_records(tmp_path: Path) -> None:
    with lane_of(DEMO, tmp_path / "records") as lane:
        looked = lane.call("check", str(lane.card), "--live", "--seconds", "2", "--data", str(lane.data))
        assert looked.returncode == 0, looked.stderr
        assert "rows/s, card says 1000" in looked.stdout and "force: mean" in looked.stdout
        assert not lane.data.exists()
        wrong = lane.folder / "wrong.toml"
        wrong.write_text(lane.card.read_text("utf-8").replace("460800", "921600"), encoding="utf-8")
        looked = lane.call("check", str(wrong), "--live", "--seconds", "1")
        assert looked.returncode == 1 and "speed_baud" in looked.stderr
        with lane.served() as daemon:
            said = ended(daemon, signal.SIGTERM)
        assert "crosshead stopped, all that was recorded is in" in said
        assert os.listdir(lane.data / ".spool" / "kiln-lane-demo") == []
        assert not list(lane.folder.glob("midspan/*/ring-*"))


def test_what_is_refused_while_a_frame_is_served_and_what_a_kill_leaves(tmp_path: Path) -> None:
    with lane_of(DEMO, tmp_path / "records") as lane:
        with lane.served() as daemon:
            second = lane.call("serve", str(lane.card), "--data", str(lane.data))
            assert second.returncode == 1 and second.stderr.count("\n") == 1
            assert "already served" in second.stderr
            looked = lane.call("check", str(lane.card), "--live")
            assert looked.returncode == 1 and "in use by another program" in looked.stderr
            watched = lane.call("watch", "--terminal", "--seconds", "1")
            assert watched.returncode == 0 and "at rest" in watched.stdout
            room = reported()["recorder"]["room_bytes"]
            assert room > 12e6  # a minute at 214 kB/s is kept filled ahead
            journal = next((lane.data / ".spool" / "kiln-lane-demo").glob("journal-*"))
            recovered = lane.call("recover", str(journal), "--data", str(lane.data))
            assert recovered.returncode == 1 and "is written by another process" in recovered.stderr
            daemon.kill()
            daemon.wait(10)
        with lane.served() as daemon:
            assert look()["state"]["state"] == "unknown - look at the frame"
            assert "asks for a look at the frame" in ended(daemon, signal.SIGINT)


def look() -> dict[str, Any]:
    with Client(running_places(None)) as client:
        return client.look()


def reported() -> dict[str, Any]:
    """What recorder and archivist last said of themselves."""
    reports: dict[str, Any] = look()["state"]["reports"]
    return reports


def test_a_real_frame_starts_no_bar_before_its_drills_and_then_at_once(tmp_path: Path) -> None:
    with lane_of(DEMO, tmp_path / "records", changes=REAL) as lane, lane.served():
        with Client(running_places(None)) as client:
            client.sit("Rig")
            client.do("series", path=SERIES, sure=True)
            with pytest.raises(Refused, match="polarity is not proven"):
                client.do("mount")
            client.rise()
            polarity(lane)
            stop_drill(lane)
            lane.hands(mount={"number": "DEMO-01", "width_mm": 4.0, "thickness_mm": 3.0})
            client.sit("Rig")
            assert client.do("mount")["specimen"] == "DEMO-01"
        proofs = json.loads((lane.data / ".spool" / "kiln-lane-demo" / "proofs.json").read_text("utf-8"))
        assert proofs["polarity"]["moved_mm"] == pytest.approx(0.5, abs=0.01)
        assert proofs["stop_drill"]["verified"] and 0 < proofs["stop_drill"]["after_s"] < 0.3
        assert proofs["stop_drill"]["who"] == "A. Person"
        other = lane.folder / "other.toml"
        other.write_text(
            lane.card.read_text("utf-8").replace("gap_mm = 0.15", "gap_mm = 0.2"), encoding="utf-8"
        )
        refused = lane.call("check", str(other), "--polarity", said="A. Person\n")
        assert refused.returncode == 1 and "is served with another card than this one" in refused.stderr


def polarity(lane: Lane) -> None:
    with typed("check", str(lane.card), "--polarity", folder=lane.folder) as person:
        person.wait("Your name")
        person.type("A. Person\r")
        person.wait("Push the loading roller by hand")
        lane.hands(fault={"kind": "halves-left", "force_n": 8})
        person.wait(r"Seen: \+[78]\.")
        lane.hands(clear=True)
        person.wait("back\\?")
        person.type("y\r")
        person.wait(r"polarity recorded [^\0]* stop drill")
        assert person.end() == 0


def stop_drill(lane: Lane) -> None:
    """One that is not confirmed moves and proves nothing."""
    refused = lane.call("check", str(lane.card), "--stop-drill", said="A. Person\nn\n")
    assert refused.returncode == 1 and "not confirmed: nothing was moved" in refused.stderr
    with typed("check", str(lane.card), "--stop-drill", folder=lane.folder) as person:
        person.wait("Your name")
        person.type("A. Person\r")
        person.wait("stop after 1.5 s\\?")
        person.type("y\r")
        person.wait(r"Stood still after 0\.\d+ s, run-on [\d.]+ um")
        person.wait("stop drill recorded .* runs may start")
        assert person.end() == 0


def test_a_reversed_cell_is_found_and_the_lock_stays(tmp_path: Path) -> None:
    with lane_of(DEMO, tmp_path / "records", changes=REAL) as lane:
        lane.hands(fault={"kind": "wrong-polarity"})
        with lane.served():
            with typed("check", str(lane.card), "--polarity", folder=lane.folder) as person:
                person.wait("Your name")
                person.type("A. Person\r")
                person.wait("Push the loading roller by hand")
                lane.hands(fault={"kind": "halves-left", "force_n": 8})
                person.wait("the force has the wrong sign")
                assert person.end() == 1
            with Client(running_places(None)) as client:
                client.sit("Rig")  # the seat is free again
                client.do("series", path=SERIES, sure=True)
                with pytest.raises(Refused, match="polarity is not proven"):
                    client.do("mount")
        assert not (lane.data / ".spool" / "kiln-lane-demo" / "proofs.json").exists()


@pytest.mark.parametrize("frozen", [False, True], ids=["station alive", "station frozen"])
def test_a_wrong_sign_voids_the_stored_proof_and_the_next_start_asks_anew(
    tmp_path: Path, frozen: bool
) -> None:
    with lane_of(DEMO, tmp_path / "records", changes=REAL) as lane:
        proofs = lane.data / ".spool" / "kiln-lane-demo" / "proofs.json"
        write_proof(proofs, load_frame(lane.card), POLARITY, {})
        with lane.served() as daemon:
            if frozen:
                os.kill(station_of(daemon.pid), signal.SIGSTOP)
            lane.hands(fault={"kind": "wrong-polarity"})
            lane.hands(fault={"kind": "halves-left", "force_n": 60})
            while not frozen and POLARITY in json.loads(proofs.read_text("utf-8")):
                time.sleep(0.02)
            assert lane.call("stop").returncode == 0  # the bench has passed the sample by now
            daemon.terminate()
            daemon.communicate(timeout=60)
        stored = json.loads(proofs.read_text("utf-8"))
        assert POLARITY not in stored
        assert [proof["void"]["reason"] for proof in stored["earlier"]] == ["the force had the wrong sign"]
        lane.hands(clear=True)
        with lane.served(), Client(running_places(None)) as client:
            client.sit("Rig")
            client.do("series", path=SERIES, sure=True)
            with pytest.raises(Refused, match="polarity is not proven"):
                client.do("mount")


def test_an_overloaded_cell_takes_no_bar_until_zero_and_weight_are_right(tmp_path: Path) -> None:
    with lane_of(DEMO, tmp_path / "records", changes=REAL) as lane:
        proofs = lane.data / ".spool" / "kiln-lane-demo" / "proofs.json"
        for kind in KINDS:
            write_proof(proofs, load_frame(lane.card), kind, {})
        with lane.served():
            lane.hands(fault={"kind": "halves-left", "force_n": 1050.0})
            with Client(running_places(None)) as client:
                while not client.look()["summary"].get("cell_locked_s"):
                    time.sleep(0.02)
                lane.hands(clear=True)
                client.sit("Rig")
                while client.look()["summary"]["moving"] or not reset(client):
                    time.sleep(0.1)
                client.do("series", path=SERIES, sure=True)
                with pytest.raises(Refused, match="the cell was overloaded"):
                    client.do("mount")
        with lane.served():  # the lock outlives the daemon
            with typed("check", str(lane.card), "--cell-weight", "200", folder=lane.folder) as person:
                person.wait("Your name")
                person.type("A. Person\r")
                person.wait("Everything off the cell")
                person.type("y\r")
                person.wait("Now 200 N hang")
                lane.hands(fault={"kind": "halves-left", "force_n": 200.0})
                person.type("y\r")
                person.wait("the cell is free again")
                assert person.end() == 0
            while "cell_lock" in json.loads(proofs.read_text("utf-8")):
                time.sleep(0.02)


def reset(client: Client) -> bool:
    """Once the force is seen to be back."""
    try:
        client.do("reset", looked=True)
    except Refused:
        return False
    return True


def station_of(pid: int) -> int:
    """The station among the processes of a daemon."""
    children = Path(f"/proc/{pid}/task/{pid}/children").read_text("ascii").split()
    (found,) = [child for child in children if b"station.json" in Path(f"/proc/{child}/cmdline").read_bytes()]
    return int(found)


def test_a_frame_without_motion_is_watched_and_records_what_its_own_controls_do(tmp_path: Path) -> None:
    """Ten rows a second, no motion: the person's machine is played by a force that rises, and falls at once."""
    sheet = "number,width_1_mm,thickness_1_mm\nM-1,40.0,40.0\n"
    series = (
        'card = "series"\nname = "prisms"\noperator = "A. Person"\nmaterial = "mortar"\nmethod = "mortar-prisms.toml"\n'
        'fixture = "three-100"\nsheet = "prisms.csv"\ntemperature_c = 21.0\nhumidity_percent = 50.0\n'
    )
    with lane_of("kiln-lane-c.toml", tmp_path / "records", bars="mortar") as lane, lane.served():
        (lane.folder / "prisms.csv").write_text(sheet, encoding="utf-8")
        (lane.folder / "prisms.toml").write_text(series, encoding="utf-8")
        method = example_path("mortar-prisms.toml").read_text("utf-8")
        (lane.folder / "mortar-prisms.toml").write_text(method, encoding="utf-8")
        with typed("run", "prisms.toml", "--sure", folder=lane.folder) as person:
            person.wait("monitor only: midspan cannot stop it")
            person.type("m")
            person.wait("midspan can NOT stop it")
            person.type(" ")
            person.wait("NO STOP: monitor only")
            person.type("G")
            person.wait("strike O")
            person.type("O")
            person.wait("start refused: monitor only: start the machine by its own controls")
            lane.hands(fault={"kind": "drift", "per_s": 600.0})
            person.wait(r"state\s+loading")
            person.wait(r"2[0-9]{3}\.\d N net", 20.0)
            lane.hands(clear=True)
            person.wait(r"M-1: [\d.]+ MPa at 2\d{3}\.\d N   sudden break", 30.0)
            person.wait("every bar of the series is broken")
            person.type("q")
            assert person.end() == 0
        stopped = lane.call("stop")
        assert stopped.returncode == 1
        assert (
            "monitor only: midspan has no way to stop this machine - USE THE EMERGENCY STOP" in stopped.stderr
        )
        (record,) = (lane.data / "prisms").glob("*.h5")
        checked = lane.call("verify", str(record))
        assert checked.returncode == 0 and "received = recorded + rejected" in checked.stdout
