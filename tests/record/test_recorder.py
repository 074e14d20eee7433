"""The recorder loses nothing that was acknowledged and acknowledges nothing that could be lost."""

from __future__ import annotations

import errno
import os
import random
import signal
import subprocess
import sys
import time
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import pytest

from daq.record import recorder as recorder_module
from daq.record.mark import Mark, write_mark
from daq.record.recorder import Recorder, drain_ring, run_recorder, unsafe_bytes
from daq.stream.entry import Kind
from daq.stream.files import OsFiles
from daq.stream.journal_reader import JournalReader
from daq.stream.ring import Ring, RingWriter

SECOND = 1_000_000_000


class WeakDisk(OsFiles):
    """The real disk until told otherwise."""

    def __init__(self) -> None:
        self.write_error = 0
        self.sync_errors = 0

    def write(self, handle: int, data: bytes, offset: int) -> None:
        if self.write_error:
            raise OSError(self.write_error, os.strerror(self.write_error))
        super().write(handle, data, offset)

    def sync(self, handle: int) -> None:
        if self.sync_errors:
            self.sync_errors -= 1
            raise OSError(errno.EIO, os.strerror(errno.EIO))
        super().sync(handle)


class Room:
    def __init__(self, folder: Path) -> None:
        self.ring_path = folder / "ring"
        self.writer: RingWriter = Ring.create(self.ring_path, 1 << 20, 77)
        self.journal = folder / "j"
        self.disk = WeakDisk()
        self.said: list[Mapping[str, Any]] = []
        self.now_ns = 10 * SECOND
        self.recorder = self.new_recorder()

    def new_recorder(self) -> Recorder:
        return Recorder(self.ring_path, self.journal, self.said.append, files=self.disk)

    def write(self, count: int, size: int = 100) -> None:
        for number in range(count):
            assert self.writer.append_batch([(Kind.RAW, self.now_ns + number, bytes([number % 251]) * size)])

    def advance(self, seconds: float = 0.02) -> None:
        self.now_ns += round(seconds * SECOND)
        self.recorder.advance(self.now_ns)

    def kept(self) -> list[int]:
        return [entry.sequence for entry in JournalReader(self.journal).iterate()]


@pytest.fixture
def room(tmp_path: Path) -> Iterator[Room]:
    made = Room(tmp_path)
    yield made
    made.writer.close()


def test_acknowledged_only_after_a_sync_and_every_100_ms(room: Room) -> None:
    room.advance()
    room.write(5)
    room.advance()
    assert room.writer.acked_sequence == 0, "read and appended, not synced yet"
    room.advance(0.1)
    assert room.writer.acked_sequence == 5 and room.writer.acked_ns == room.now_ns
    room.advance(0.1)
    assert room.writer.acked_ns == room.now_ns, "a sign of life without new entries"
    assert room.kept() == [1, 2, 3, 4, 5]


def test_a_restart_goes_on_behind_the_journals_tail_not_the_acknowledgement(room: Room) -> None:
    room.advance()
    room.write(5)
    room.advance()  # appended; never synced, never acknowledged
    room.recorder._journal._let_go()  # what the kernel does to a killed process
    room.recorder = room.new_recorder()
    room.write(3)
    room.advance(0.2)
    assert room.kept() == list(range(1, 9))
    assert room.writer.acked_sequence == 8


def test_a_full_disk_is_told_and_the_ring_keeps_all(room: Room) -> None:
    room.advance()
    room.disk.write_error = errno.ENOSPC
    room.write(50)
    for _ in range(10):
        room.advance(0.2)
    assert room.writer.acked_sequence == 0
    assert "No space" in room.said[-1]["trouble"] and room.said[-1]["lag_s"] > 1.5
    room.disk.write_error = 0
    room.advance(0.2)
    room.advance(0.5)
    assert room.writer.acked_sequence == 50 and room.kept() == list(range(1, 51))
    assert room.said[-1]["trouble"] == "" and room.said[-1]["lag_s"] < 0.6


def test_one_failed_sync_is_flagged_and_costs_nothing(room: Room) -> None:
    room.advance()
    room.write(20)
    room.disk.sync_errors = 1
    room.advance(0.2)
    room.advance(0.6)
    assert room.writer.acked_sequence == 20 and room.kept() == list(range(1, 21))
    assert room.said[-1]["flagged"] and "sync" in room.said[-1]["faults"][0]


def test_segments_stay_for_a_minute_and_until_they_are_sealed(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    room = Room(tmp_path)
    entries = 0
    for _ in range(90):
        room.write(8, 60_000)
        entries += 8
        room.advance(1.0)
        room.advance(0.1)
    assert room.kept()[0] == 1, "nothing is deleted without the archivist's mark"
    write_mark(room.journal, Mark(77, 30))
    room.advance(1.0)
    assert room.kept()[0] == 1, "the first segment still holds needed entries"
    write_mark(room.journal, Mark(77, entries))
    room.advance(1.0)
    kept = room.kept()
    assert 1 < kept[0] <= entries - 54 * 8, "old segments have gone, the last minute has not"
    assert kept[-1] == entries
    room.recorder.finish(lambda: room.now_ns)
    room.writer.close()


def test_at_the_end_the_ring_is_emptied_synced_and_acknowledged(room: Room) -> None:
    room.advance()
    room.write(300, 2000)
    room.recorder.finish(lambda: room.now_ns)
    assert room.writer.acked_sequence == 300 and room.kept() == list(range(1, 301))
    assert JournalReader(room.journal).verify().closed


def test_a_disk_that_refuses_to_the_end_is_told_and_the_ring_is_left_for_the_next_start(room: Room) -> None:
    room.advance()
    room.write(10)
    room.disk.write_error = errno.EIO
    clock = iter(range(room.now_ns, room.now_ns + 100 * SECOND, SECOND))
    left = room.recorder.finish(lambda: next(clock))
    assert room.said[-1]["trouble"]
    assert str(room.ring_path) in left and "Input/output error" in left and "LOST WITH A REBOOT" in left
    assert f"midspan recover {room.journal}" in left
    room.writer.close()
    assert drain_ring(room.ring_path, room.journal) == 10


def test_the_body_says_whether_the_ring_is_empty(tmp_path: Path) -> None:
    """What the supervisor goes by before it lets the ring go."""
    room = Room(tmp_path)
    room.write(10)
    room.recorder._journal._let_go()
    assert unsafe_bytes(room.ring_path) > 0
    assert not run_recorder(room.ring_path, room.journal, room.said.append, lambda: True, files=room.disk)
    assert unsafe_bytes(room.ring_path) == 0 == unsafe_bytes(tmp_path / "no ring")
    room.writer.close()


def test_what_is_acknowledged_is_how_far_behind_the_recorder_is(
    room: Room, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A recorder that works without pause and is 20 s behind must not look alive and well to the bench."""
    monkeypatch.setattr(recorder_module, "PIECES_MAX", 1)
    room.advance(0.2)
    assert room.writer.acked_ns == room.now_ns
    for _ in range(4):
        room.write(1, 200_000)
        room.now_ns += 5 * SECOND
    written_ns = room.now_ns - 20 * SECOND
    for behind_s in (20.0, 15.0, 10.0):
        room.advance(0.2)
        assert (room.now_ns - room.writer.acked_ns) * 1e-9 == pytest.approx(behind_s, abs=1.0)
    assert room.writer.acked_ns == written_ns + 10 * SECOND
    room.advance(0.2)
    room.advance(0.2)
    assert room.writer.acked_ns == room.now_ns, "caught up"


def test_a_restarted_recorder_is_as_far_behind_as_the_one_before(room: Room) -> None:
    room.advance(0.2)
    safe_ns = room.now_ns
    room.write(5)
    room.now_ns += 8 * SECOND
    room.recorder._journal._let_go()
    room.recorder = room.new_recorder()
    room.disk.write_error = errno.ENOSPC
    room.advance()
    assert room.said[-1]["lag_s"] == pytest.approx((room.now_ns - safe_ns) * 1e-9)
    assert room.writer.acked_ns == safe_ns


def test_room_ahead_is_filled_piece_by_piece(tmp_path: Path) -> None:
    writer = Ring.create(tmp_path / "ring", 1 << 20, 78)
    said: list[Mapping[str, Any]] = []
    recorder = Recorder(tmp_path / "ring", tmp_path / "j", said.append, bytes_ahead=40 << 20)
    for second in range(4):
        recorder.advance((10 + second) * SECOND)
    assert said[-1]["room_bytes"] >= 40 << 20
    recorder.finish(lambda: 20 * SECOND)
    writer.close()


def test_the_ring_of_a_dead_bench_is_brought_home_once(tmp_path: Path) -> None:
    room = Room(tmp_path)
    room.write(10)
    room.advance()
    room.write(10)
    room.recorder._journal._let_go()
    room.writer.close()
    assert drain_ring(room.ring_path, room.journal) == 10
    assert room.kept() == list(range(1, 21)) and not room.ring_path.exists()


def test_the_recorder_starts_without_hdf5_numpy_heavy_or_pydantic() -> None:
    code = "import sys, daq.record.recorder; print([m for m in ('h5py', 'pydantic', 'scipy') if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


@pytest.mark.slow
@pytest.mark.processes
def test_killed_again_and_again_while_the_bench_writes(tmp_path: Path) -> None:
    """Every entry once, in order; nothing acknowledged is ever missing."""
    writer = Ring.create(tmp_path / "ring", 4 << 20, 79)
    chance = random.Random(5)
    written = 0
    for life in range(8):
        child = os.fork()
        if child == 0:
            try:
                run_recorder(tmp_path / "ring", tmp_path / "j", lambda _: None, lambda: False)
            finally:
                os._exit(1)
        deadline = time.monotonic() + chance.uniform(0.05, 0.35)
        while time.monotonic() < deadline:
            written += 3
            assert writer.append_batch([(Kind.RAW, time.monotonic_ns(), os.urandom(300))] * 3)
            time.sleep(0.002)  # the pace of a bench
        os.kill(child, signal.SIGKILL)
        os.waitpid(child, 0)
        kept = [entry.sequence for entry in JournalReader(tmp_path / "j").iterate()]
        assert kept == list(range(1, len(kept) + 1)), f"life {life}"
        assert len(kept) >= writer.acked_sequence
    ended = iter([False, False, True])
    run_recorder(tmp_path / "ring", tmp_path / "j", lambda _: None, lambda: next(ended, True))
    kept = [entry.sequence for entry in JournalReader(tmp_path / "j").iterate()]
    assert kept == list(range(1, written + 1)) and writer.acked_sequence == written
    writer.close()
