"""`midspan run` with real processes on a real terminal: keys, bursts, stop, leaving. A bar is broken on the way."""

from __future__ import annotations

import signal
from pathlib import Path

import pytest

from daq.cards.load import example_path, load_series
from daq.errors import Refused
from tests.cli.typed import Typed, typed
from tests.processes.rig import Rig, rig_of

pytestmark = [pytest.mark.slow, pytest.mark.processes]
SERIES = str(example_path("demo-series.toml"))


def lay_next(rig: Rig) -> None:
    specimen = load_series(example_path("demo-series.toml")).specimens[0]
    rig.lay(specimen.model_dump(mode="json"))


def start(person: Typed) -> None:
    person.type("m")
    person.wait(r"state\s+ready")
    person.type("G")
    person.wait("strike O within 2 s to START")
    person.type("O")


def is_moving(rig: Rig) -> bool:
    return bool(rig.hands(query=True)["inputs"]["moving"])


def sits(rig: Rig) -> str:
    return str(rig.client.look()["state"]["operator"])


def test_a_bar_is_called_started_broken_and_told(tmp_path: Path) -> None:
    with rig_of(data=tmp_path) as rig, typed("run", SERIES, folder=tmp_path) as person:
        lay_next(rig)
        person.wait(r"G O start")
        person.wait(r"PRACTICE - SIMULATED DATA")
        person.wait(r"state\s+at rest")
        # nothing of this moves anything: Enter, a gauge, a pasted command, the two keys in one burst
        for burst in ("\r", "4.017\r", "GO\r", "mGO", "bars/GGOOmm\n"):
            person.type(burst)
        person.never("refused|strike O|state +ready", 1.5)
        assert rig.client.look()["state"]["run"] is None
        person.type("G")
        person.wait("strike O")
        person.type("O")
        person.wait("start refused:")
        person.wait("  - state is at rest|state is at rest")
        start(person)
        person.wait(r"state\s+loading")
        person.type("q")
        person.wait("the frame is moving: Space stops it")
        person.wait(r"DEMO-01: [\d.]+ MPa at [\d.]+ N   sudden break   U\(k=2\)", 60.0)
        person.wait(r"record: ")
        person.wait(r"next DEMO-02; 1 of 6 broken")
        person.type("3")
        person.wait("note 3 is in the stream")
        assert sits(rig) == "Kiln Lane visitor"
        person.type("q")
        person.wait("the seat is free")
        assert person.end() == 0
        assert sits(rig) == ""
        rig.client.sit("Somebody else")


def test_however_a_stop_comes_the_frame_stands_and_the_seat_is_freed(tmp_path: Path) -> None:
    """By a space inside pasted words, by Ctrl-C, by a closed window, by a polite kill."""
    with rig_of(data=tmp_path) as rig:
        for how in ("pasted", "Ctrl-C", "window closed", "terminated"):
            with typed("run", SERIES, folder=tmp_path) as person:
                lay_next(rig)
                person.wait(r"next DEMO-01; 0 of 6 broken")
                start(person)
                person.wait(r"state\s+(approaching|in contact|seating|loading)")
                leave(person, how)
                assert person.process.wait(10) == 0 or how == "window closed"
                rig.wait("the stop", lambda: rig.session.state == "stopped", 10.0)
                rig.wait("standstill", lambda: not is_moving(rig), 2.0)
                assert sits(rig) == "", how
            make_ready(rig)


def leave(person: Typed, how: str) -> None:
    if how == "pasted":
        person.type("pasted words GO\r")
        person.wait("STOP sent")
        person.wait("DEMO-01: not broken")
        person.type("q")
        person.wait("the seat is free")
    elif how == "Ctrl-C":
        person.type("\x03")
    elif how == "window closed":
        person.hang_up()
    else:
        person.process.send_signal(signal.SIGTERM)


def make_ready(rig: Rig) -> None:
    """Reset, and the crosshead back up from the machine's own panel."""
    rig.wait("the end of the run", lambda: rig.client.look()["state"]["run"] is None, 10.0)
    rig.client.sit("Rig")
    rig.client.do("reset", looked=True)
    rig.client.rise()
    rig.hands(**{"raise": True})
    rig.wait("the start position", lambda: not is_moving(rig), 10.0)


def test_a_seat_that_is_taken_is_refused_and_taken_over_only_by_name(tmp_path: Path) -> None:
    with rig_of(data=tmp_path) as rig:
        rig.client.sit("First Person")
        with typed("run", SERIES, folder=tmp_path) as person:
            person.wait("sit refused: the seat is taken by First Person")
            assert person.end() == 1
        with typed("run", SERIES, "--instead", folder=tmp_path) as person:
            person.wait(r"operator\s+Kiln Lane visitor")
            with pytest.raises(Refused, match="seat is Kiln Lane visitor's"):
                rig.client.do("note", text="not mine any more")
            person.type("q")
            assert person.end() == 0
