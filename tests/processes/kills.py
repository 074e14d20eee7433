"""Kills for the soak: rounds of real runs in which processes end by SIGKILL at seeded moments, each checked after.

A complaint is a line; nothing raises. The deaths that every change must pass are in test_deaths.py.
"""

from __future__ import annotations

import random
import time
from collections.abc import Callable, Iterator
from pathlib import Path

from daq.errors import MidspanError
from daq.record.read import read_meta
from daq.record.verify import verify
from daq.station.supervisor import Supervisor
from tests.processes.rig import Rig, check_whole, records, rig_of, stands_still

IN_ONE_BAR = 18
ROUND = IN_ONE_BAR + 2  # and one station, one bench
FRAMES = ("kiln-lane-demo.toml", "kiln-lane-b.toml")


def kill_round(folder: Path, number: int, kills: int) -> Iterator[tuple[str, int, str]]:
    """(which process, how many kills, complaint or empty), at most that many kills in all."""
    chance = random.Random(number)
    frame = FRAMES[number % len(FRAMES)]
    in_bar = min(IN_ONE_BAR, kills)
    plans: list[tuple[str, int, Callable[[Path], None]]] = [
        ("recorder, archivist", in_bar, lambda data: _recorder(frame, data, chance, in_bar)),
        ("station", 1, lambda data: _station(frame, data, chance)),
        ("bench", 1, lambda data: _bench(frame, data, chance)),
    ]
    for role, count, run in plans:
        kills -= count
        if kills >= 0:
            yield role, count, _complaint(run, folder / role.split(",")[0])


def _complaint(run: Callable[[Path], None], data: Path) -> str:
    data.mkdir(parents=True)
    try:
        run(data)
    except (AssertionError, MidspanError, OSError) as error:
        return f"{type(error).__name__}: {error}"
    return ""


def _recorder(frame: str, data: Path, chance: random.Random, kills: int) -> None:
    """Recorder and archivist in turn, all through one bar: nothing lost, nothing twice, the break called."""
    with rig_of(frame, data=data) as rig:
        rig.begin()
        run_id = rig.start_bar()
        for kill in range(kills):
            rig.pump(chance.uniform(0.05, 0.3))
            rig.kill(("recorder", "archivist")[kill % 2])
            rig.pump(0.1)
        record = Path(str(rig.session.finish(run_id, timeout_s=120)["path"]))
        assert rig.bench_alive, "the bench process died"
    check_whole(record)
    assert verify(record).accounted, "not accounted"
    assert read_meta(record)["result"]["break_class"] == "sudden break"
    assert records(data) == [record], f"records {records(data)}"


def _station(frame: str, data: Path, chance: random.Random) -> None:
    """A controlled stop after a second of silence, and a sealed record of the interrupted bar."""
    with rig_of(frame, data=data) as rig:
        _load(rig, chance)
        rig.kill("station")
        rig.pump(3.0)
        assert stands_still(rig), "the crosshead moves after the station's death"
        rig.wait("the sealed record", lambda: bool(records(data)), 60.0)
    check_whole(records(data)[0])


def _bench(frame: str, data: Path, chance: random.Random) -> None:
    """The stopper stops the machine; the next start knows nothing, moves nothing, and recovers the record."""
    with rig_of(frame, data=data) as rig:
        _load(rig, chance)
        rig.kill("bench")
        assert stands_still(rig, 2.0), "the stopper did not stop the machine"
        assert not rig.supervisor.look(), "the supervisor goes on without a bench process"
        rig.supervisor.end()
        with Supervisor(rig.outfit, rig.said.append):
            until_s = time.monotonic() + 60.0
            while not records(data) and time.monotonic() < until_s:
                time.sleep(0.05)
            assert rig.client.look()["state"]["state"] == "unknown - look at the frame"
    (record,) = records(data)
    check_whole(record)
    assert read_meta(record)["interrupted"]


def _load(rig: Rig, chance: random.Random) -> None:
    """A started bar, at some moment of its loading."""
    rig.begin()
    rig.start_bar()
    rig.wait("load on the bar", lambda: rig.net_n() > 30.0)
    rig.pump(chance.uniform(0.0, 1.0))
