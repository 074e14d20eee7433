"""What dead daemons left behind comes home, each ring into the journal it names, and nothing goes before it is safe."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import pytest

from daq.record.read import read_meta
from daq.station.leftovers import clear_leftovers
from daq.station.places import Places
from daq.stream.entry import Entry
from daq.stream.journal import Journal
from daq.stream.ring import Ring
from tests.record.synthetic_run import SyntheticBench, demo_reduce

STREAM = 0xA11
OWN = 0xB22


class Room:
    """A frame's places, with two data folders."""

    def __init__(self, folder: Path) -> None:
        self.places = Places("lane", folder / "run", folder / "data")
        self.other = Places("lane", folder / "run", folder / "other")
        self.places.make()
        self.ring = self.places.ring(STREAM)
        self.said: list[str] = []
        self.reports: list[Mapping[str, Any]] = []

    def clear(self) -> None:
        clear_leftovers(self.places, OWN, demo_reduce, self.reports.append, self.said.append, bool)

    def leave_ring(self, entries: list[Entry], journal: str) -> None:
        writer = Ring.create(self.ring, 1 << 20, STREAM, journal=journal)
        assert writer.append_batch([(one.kind, one.monotonic_ns, one.payload) for one in entries])
        writer.close()


@pytest.fixture
def room(tmp_path: Path) -> Room:
    return Room(tmp_path)


def records(data: Path) -> list[str]:
    return sorted(path.name for path in data.glob("*/*.h5"))


def one_run() -> list[Entry]:
    return list(SyntheticBench(stream_id=STREAM).run("A01", steps=20))


def test_a_ring_goes_into_the_data_folder_it_names_not_into_ours(room: Room) -> None:
    room.other.make()
    room.leave_ring(one_run(), str(room.other.journal(STREAM)))
    room.clear()
    assert records(room.other.data) == ["kiln_A01_01.h5"] and records(room.places.data) == []
    assert not room.ring.exists() and not room.other.journal(STREAM).exists()
    assert any(str(room.other.data) in line for line in room.said)


def test_a_ring_whose_data_folder_is_away_is_kept_and_told(room: Room) -> None:
    room.leave_ring(one_run(), str(room.other.journal(STREAM)))
    room.clear()
    assert room.ring.exists() and records(room.places.data) == []
    (line,) = room.said
    assert str(room.other.data) in line and "LOST WITH A REBOOT" in line and "start midspan again" in line
    room.other.make()
    room.clear()
    assert records(room.other.data) == ["kiln_A01_01.h5"] and not room.ring.exists()


def test_a_ring_that_names_nothing_goes_into_our_own(room: Room) -> None:
    room.leave_ring(one_run(), "")
    room.clear()
    assert records(room.places.data) == ["kiln_A01_01.h5"]


def test_a_journal_waits_for_its_ring(room: Room) -> None:
    """The ring holds the end of the run: sealed without it, the record would lack it for ever."""
    entries = one_run()
    journal = Journal.create(room.places.journal(STREAM), STREAM, segment_bytes=1 << 18)
    journal.append(entries[:30])
    journal.sync()
    room.leave_ring(entries, str(room.places.journal(STREAM)))
    room.clear()  # the journal is still locked by a recorder that has not ended
    assert records(room.places.data) == [] and room.ring.exists()
    journal.close()
    room.clear()
    (record,) = sorted(room.places.data.glob("*/*.h5"))
    assert not read_meta(record)["interrupted"], "with its run_closed, which lay in the ring only"
    assert not room.ring.exists()


def test_the_status_of_one_leftover_is_not_the_word_that_all_is_done(room: Room) -> None:
    room.leave_ring(one_run(), "")
    room.clear()
    assert {report["report"] for report in room.reports} == {"recovering", "sealed"}
