"""The archivist follows, shows and seals; nothing that fails beside it costs a record. Time is an argument here."""

from __future__ import annotations

import shutil
import subprocess
import sys
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from daq.errors import RecordingError
from daq.record import sealing
from daq.record.archivist import Archivist
from daq.record.mark import read_mark
from daq.record.publish import read_sums
from daq.record.read import check_bytes, read_meta
from daq.record.recover import recover
from daq.record.verify import check_contents
from daq.stream.entry import Entry
from daq.stream.journal import Journal
from tests.record.conftest import SEGMENT_BYTES
from tests.record.synthetic_run import SyntheticBench, demo_reduce


class Room:
    """A journal being written and an archivist that follows it, on a clock of their own."""

    def __init__(self, folder: Path, **archivist: Any) -> None:
        self.folder = folder
        self.bench = SyntheticBench()
        self.journal = Journal.create(folder / "j", self.bench.stream_id, segment_bytes=SEGMENT_BYTES)
        self.said: list[Mapping[str, Any]] = []
        self.now_s = 0.0
        self._settings = archivist
        self.archivist = self.new_archivist()

    def new_archivist(self) -> Archivist:
        settings = {"reduce": demo_reduce, **self._settings}
        reduce = settings.pop("reduce")
        return Archivist(
            self.folder / "j", self.out, self.folder / "spool", reduce, self.said.append, **settings
        )

    @property
    def out(self) -> Path:
        return self.folder / "out"

    def write(self, entries: Iterator[Entry] | list[Entry]) -> None:
        listed = list(entries)
        for first in range(0, len(listed), 40):
            self.journal.append(listed[first : first + 40])
        self.journal.sync()

    def pump(self, seconds: float = 0.2) -> None:
        self.now_s += seconds
        while self.archivist.advance(self.now_s):
            pass

    def reports(self, word: str) -> list[Mapping[str, Any]]:
        return [said for said in self.said if said["report"] == word]

    def close(self) -> None:
        self.archivist.close()
        self.journal.close()


@pytest.fixture
def room(tmp_path: Path) -> Iterator[Room]:
    made = Room(tmp_path)
    yield made
    made.close()


def test_a_run_is_sealed_at_its_close_and_told(room: Room) -> None:
    room.pump()
    room.write(room.bench.run("A01", steps=20))
    room.pump()
    (sealed,) = room.reports("sealed")
    path = room.out / "kiln" / "kiln_A01_01.h5"
    assert sealed["path"] == str(path) and sealed["specimen"] == "A01" and not sealed["interrupted"]
    assert sealed["result"]["rows"] == 100 and "trace" not in sealed["result"]
    assert check_contents(path).ok
    assert not list((room.folder / "spool").iterdir()), "scratch and live file have gone"
    mark = read_mark(room.folder / "j")
    assert mark is not None and mark.needed_from == room.bench.sequence + 1


def test_the_live_file_can_be_read_by_others_while_it_grows(room: Room) -> None:
    room.pump()
    run = list(room.bench.run("A01", steps=40))
    room.write(run[:60])
    room.pump()
    room.pump()
    (live,) = (room.folder / "spool").rglob("*.live.h5")
    reader = (
        "import h5py, sys\n"
        "with h5py.File(sys.argv[1], 'r', swmr=True) as file:\n"
        "    print(*[len(file['channels/load'][n]) for n in ('index', 'time_s', 'counts', 'value')])\n"
        "    print(file.attrs['simulated'], repr(float(file['channels/load/value'][7])))\n"
    )
    shown = subprocess.run(
        [sys.executable, "-I", "-c", reader, live], capture_output=True, text=True, check=True
    )
    rows, marks = shown.stdout.splitlines()
    assert rows == "70 70 70 70", "14 whole steps of 5 rows are in the first 60 entries"
    room.write(run[60:])
    room.pump()
    with h5py.File(room.out / "kiln" / "kiln_A01_01.h5", "r") as file:
        assert marks == f"1 {float(file['channels/load/value'][7])!r}"


def test_a_failing_reduction_is_named_in_the_record_and_costs_nothing_else(tmp_path: Path) -> None:
    def reduce(run: Any) -> Mapping[str, Any]:
        raise ZeroDivisionError("no bar")

    room = Room(tmp_path, reduce=reduce)
    room.write(room.bench.run("A01", steps=20))
    room.pump()
    room.close()
    (path,) = room.out.rglob("*.h5")
    assert read_meta(path)["result"] == {"failure": "ZeroDivisionError: no bar"}
    report = check_contents(path)
    assert report.ok and report.rows == 120
    with h5py.File(path, "r") as file:
        assert bytes(file["trace"].attrs["signal"]) == b"force_n"
        assert file["trace/position_mm"][:].tobytes() == file["channels/crosshead/value"][:].tobytes()


def test_a_result_that_json_does_not_know_is_kept_as_far_as_it_goes(tmp_path: Path) -> None:
    def reduce(run: Any) -> Mapping[str, Any]:
        return {
            "strength_mpa": np.float64("nan"),
            "rows": np.int64(3),
            "path": Path("x"),
            "list": np.arange(2),
        }

    room = Room(tmp_path, reduce=reduce)
    room.write(room.bench.run("A01", steps=5))
    room.pump()
    room.close()
    (path,) = room.out.rglob("*.h5")
    assert read_meta(path)["result"] == {"strength_mpa": None, "rows": 3, "path": "x", "list": [0, 1]}


def test_a_taken_name_is_never_overwritten(room: Room) -> None:
    taken = room.out / "kiln" / "kiln_A01_01.h5"
    taken.parent.mkdir(parents=True)
    taken.write_bytes(b"somebody's")
    room.write(room.bench.run("A01", steps=5))
    room.pump()
    (sealed,) = room.reports("sealed")
    assert taken.read_bytes() == b"somebody's"
    assert sealed["renamed"] and Path(sealed["path"]) != taken and check_contents(Path(sealed["path"])).ok


def test_the_same_bar_twice_gives_two_records(room: Room) -> None:
    for run_id in ("11111111-1111-4111-8111-111111111111", "22222222-2222-4222-8222-222222222222"):
        room.write(room.bench.run("A01", steps=5, run_id=run_id))
    room.pump()
    assert {said["run_id"][:4] for said in room.reports("sealed")} == {"1111", "2222"}
    assert len({said["path"] for said in room.reports("sealed")}) == 2


def test_a_restart_in_the_middle_of_a_run_takes_it_up_from_the_journal(room: Room, record: Path) -> None:
    room.write([*room.bench.idle(40)])
    run = list(room.bench.run("A01"))
    room.pump()
    room.write(run[:200])
    room.pump()
    room.archivist.close()
    room.archivist = room.new_archivist()
    room.pump()
    assert not list((room.folder / "spool").rglob("*.live.h5")), "a live file is never begun in the middle"
    room.write(run[200:])
    room.pump()
    assert check_contents(room.out / "kiln" / "kiln_A01_01.h5").ok
    assert read_meta(room.out / "kiln" / "kiln_A01_01.h5")["run_id"] == read_meta(record)["run_id"]


def test_two_archivists_of_one_journal_are_refused(room: Room) -> None:
    with pytest.raises(RecordingError, match="by another process"):
        room.new_archivist()


def test_idle_time_is_let_go_and_an_open_run_is_held(room: Room) -> None:
    room.write(room.bench.idle(200))
    room.pump(20.0)
    room.pump(20.0)
    idle = read_mark(room.folder / "j")
    assert idle is not None and room.bench.sequence - 64 < idle.needed_from <= room.bench.sequence
    room.write(list(room.bench.run("A01", steps=100, closed=False)))
    room.pump(20.0)
    assert read_mark(room.folder / "j") == idle


def test_a_copy_is_verified_and_a_folder_that_is_away_is_tried_again(tmp_path: Path) -> None:
    room = Room(tmp_path, copy_to=tmp_path / "share")
    room.write(room.bench.run("A01", steps=5))
    room.pump()
    wait_for_copies(room)
    (failed,) = room.reports("copy_failed")
    assert "is not there" in failed["why"] and room.archivist.copies_owed == 1
    room.archivist.close()
    room.archivist = room.new_archivist()
    (tmp_path / "share").mkdir()
    room.pump()
    wait_for_copies(room)
    room.close()
    assert room.archivist.copies_owed == 0
    original, copy = room.out / "kiln" / "kiln_A01_01.h5", tmp_path / "share" / "kiln" / "kiln_A01_01.h5"
    assert copy.read_bytes() == original.read_bytes()


def wait_for_copies(room: Room) -> None:
    for _ in range(3):
        if room.archivist._copier is not None:
            room.archivist._copier.wait(10.0)
        room.pump()


def test_a_disk_without_room_is_told_and_asked_again(room: Room, monkeypatch: pytest.MonkeyPatch) -> None:
    real = shutil.disk_usage(room.folder).free
    monkeypatch.setattr(sealing, "TEXT_ROOM_BYTES", real * 2)
    room.write(room.bench.run("A01", steps=5))
    room.pump()
    assert "make room" in room.reports("waits")[0]["why"] and not room.reports("sealed")
    room.write(room.bench.run("A02", steps=5))
    monkeypatch.setattr(sealing, "TEXT_ROOM_BYTES", 4 << 20)
    room.pump(1.0)
    assert not room.reports("sealed"), "not before the retry is due"
    room.pump(2.0)
    assert [said["specimen"] for said in room.reports("sealed")] == ["A01", "A02"]


def test_sums_are_in_the_order_of_sealing_and_another_tool_agrees(room: Room) -> None:
    for specimen in ("B2", "B1"):
        room.write(room.bench.run(specimen, steps=5))
    room.pump()
    folder = room.out / "kiln"
    assert [name for _, name in read_sums(folder)] == ["kiln_B2_01.h5", "kiln_B1_01.h5"]
    subprocess.run(
        ["sha256sum", "--check", "--strict", "SHA256SUMS"], cwd=folder, check=True, capture_output=True
    )


LIVE = """
import gc, resource, sys
from pathlib import Path
import daq.record.live as live
from daq.record.head import head_of_entry
from daq.record.rows import RunRows
from tests.record.synthetic_run import SyntheticBench
live.ROOM_BYTES_MIN = 0
resource.setrlimit(resource.RLIMIT_FSIZE, (int(sys.argv[2]), int(sys.argv[2])))
run = iter(SyntheticBench(rows_per_block=50).run("A01", steps=2000))
opened = next(run)
rows = RunRows(head_of_entry(opened))
shown = live.LiveFile(Path(sys.argv[1]), rows.head)
rows.feed(opened)
for place, entry in enumerate(run):
    rows.feed(entry)
    if place % 50 == 0:
        shown.show(rows.take())
shown.close()
print("trouble" if shown.trouble else "fine", flush=True)
del shown
gc.collect()
"""


@pytest.mark.slow
@pytest.mark.processes
@pytest.mark.parametrize("limit", [3_000, 30_000, 300_000])
def test_a_live_file_that_the_disk_refuses_is_given_up_without_a_crash(tmp_path: Path, limit: int) -> None:
    """Without live.py's way out each of these ends by SIGSEGV when the HDF5 objects are let go."""
    command = [sys.executable, "-c", LIVE, str(tmp_path / "live.h5"), str(limit)]
    done = subprocess.run(command, capture_output=True, text=True, timeout=60, check=False)
    assert (done.returncode, done.stdout) == (0, "trouble\n"), done.stderr[-2000:]


FULL = """
import resource, sys
from pathlib import Path
import daq.record.live as live
from daq.record.archivist import Archivist
live.ROOM_BYTES_MIN = 0
limit = int(sys.argv[2])
resource.setrlimit(resource.RLIMIT_FSIZE, (limit, resource.RLIM_INFINITY))
work = Path(sys.argv[1])
said = []
archivist = Archivist(work / "j", work / "out", work / "spool", lambda run: {"rows": 1}, said.append)
archivist._caught_up = True
now_s = 0.0
for step in range(3000):
    now_s += 0.2
    archivist.advance(now_s)
    if step == 1500:
        resource.setrlimit(resource.RLIMIT_FSIZE, (resource.RLIM_INFINITY, resource.RLIM_INFINITY))
archivist.close()
print(*sorted({report["report"] for report in said}))
"""


@pytest.mark.slow
@pytest.mark.processes
@pytest.mark.parametrize("limit", [3_000, 60_000, 150_000, 400_000])
def test_a_disk_that_refuses_at_any_point_never_ends_the_process_by_a_signal(
    tmp_path: Path, limit: int
) -> None:
    """Files may grow to `limit` bytes and no further until half time; live file, scratch and record all meet it."""
    bench = SyntheticBench(rows_per_block=40)
    entries = list(bench.run("A01", steps=150))
    journal = Journal.create(tmp_path / "j", bench.stream_id, segment_bytes=SEGMENT_BYTES)
    for first in range(0, len(entries), 10):
        journal.append(entries[first : first + 10])
    journal.close()
    done = subprocess.run(
        [sys.executable, "-c", FULL, str(tmp_path), str(limit)],
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert done.returncode == 0, done.stderr[-2000:]
    assert "sealed" in done.stdout
    (path,) = (tmp_path / "out").rglob("*.h5")
    check_bytes(path)
    assert check_contents(path).ok
    assert recover(tmp_path / "j", tmp_path / "out", reduce=lambda run: {}, afresh=True) == (path,)
