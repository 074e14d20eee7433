"""Every call of the journal to its files, failed once and for ever, on a disk that forgets what failed.

Whatever fails and whenever: no acknowledged entry is lost, no wrong one shown, no OSError crosses the border,
and where the fault passes the recording goes on by itself.
"""

import errno
from collections.abc import Callable
from pathlib import Path
from random import Random

import pytest
from made_entries import STREAM, packed
from simulated_disk import Disk, Faults

from daq.errors import RecordingError
from daq.stream.journal import Journal
from daq.stream.journal_reader import JournalReader

FOLDER = Path("journal")
SEGMENT_BYTES = 4096 + 2000
BATCHES = 20
PIECES = [packed(1 + 4 * number, 4, Random(number), 100) for number in range(BATCHES)]
ALL = b"".join(piece.data for piece in PIECES)


class Recorder:
    """The recorder's policy on a disk with faults: what was refused is tried again, for a while."""

    def __init__(self, disk: Disk, files: Faults) -> None:
        self.disk = disk
        self.files = files
        self.acknowledged_bytes = 0
        self.refusals = 0
        self.journal: Journal | None = None

    def run(self) -> bool:
        """True where everything was recorded."""
        self.journal = self.insist(
            lambda: Journal.open(FOLDER, STREAM, segment_bytes=SEGMENT_BYTES, files=self.files)
        )
        if self.journal is None:
            return False
        for number, piece in enumerate(PIECES):
            if number == BATCHES // 2:
                self.insist(self.journal.close)
                self.disk.after_kill()
                self.journal = self.insist(
                    lambda: Journal.resume(FOLDER, segment_bytes=SEGMENT_BYTES, files=self.files)
                )
            if self.journal is None or not self.record(self.journal, piece):
                return False
            self.acknowledged_bytes += len(piece.data)
        return self.insist(self.journal.close, default=True) is not None

    def record(self, journal: Journal, piece) -> bool:
        if journal.last_sequence < piece.first_sequence:
            self.insist(lambda: journal.append_packed(piece))
        if journal.last_sequence < piece.first_sequence:
            return False
        return self.insist(journal.sync) == piece.last_sequence

    def insist(self, call: Callable, default: object = None) -> object:
        for _ in range(3):
            try:
                result = call()
                return result if result is not None else default
            except RecordingError:
                self.refusals += 1
        return None


def judge(recorder: Recorder, recorded: bool) -> None:
    """After the fault: power loss, then reading, then the next recorder."""
    rng = Random(7)
    for turn in range(2):
        image = recorder.disk.after_power_loss(rng)
        found = b"".join(piece.data for piece in JournalReader(FOLDER, files=image).iterate_packed())
        assert ALL.startswith(found)
        assert len(found) >= recorder.acknowledged_bytes
        assert not recorded or found == ALL
        if turn == 0 and any(name.startswith("segment") for name in image.names_seen):
            journal = Journal.resume(FOLDER, segment_bytes=SEGMENT_BYTES, files=image)
            more = packed(journal.last_sequence + 1, 2, rng)
            journal.append_packed(more)
            journal.close()
            pieces = JournalReader(FOLDER, files=image).iterate_packed()
            assert b"".join(piece.data for piece in pieces) == found + more.data
            JournalReader(FOLDER, files=image).verify()


def calls_of_a_clean_run() -> list[str]:
    disk, methods = Disk(), []
    files = Faults(disk, lambda _, method: bool(methods.append(method)))
    assert Recorder(disk, files).run()
    return methods


CALLS = calls_of_a_clean_run()


def test_the_run_makes_every_kind_of_call_often_enough_to_be_worth_it() -> None:
    assert len(CALLS) > 120
    assert {"create", "fill", "write", "sync", "rename", "sync_folder", "remove", "read", "open"} <= set(
        CALLS
    )


@pytest.mark.slow
@pytest.mark.parametrize("error", [errno.EIO, errno.ENOSPC])
def test_each_call_failing_once_costs_nothing(error: int) -> None:
    for number, method in enumerate(CALLS, 1):
        disk = Disk()
        files = Faults(disk, lambda call, _, number=number: call == number, error)
        recorder = Recorder(disk, files)
        recorded = recorder.run()
        assert files.failed == [method]
        assert recorded, f"call {number}, {method}: one fault must not end the recording"
        judge(recorder, recorded)


@pytest.mark.slow
def test_each_call_failing_and_everything_behind_it_loses_nothing_acknowledged() -> None:
    complete = 0
    for number in range(1, len(CALLS) + 1):
        disk = Disk()
        files = Faults(disk, lambda call, _, number=number: call >= number)
        recorder = Recorder(disk, files)
        recorded = recorder.run()
        complete += recorded
        disk.after_kill()
        judge(recorder, recorded)
    assert complete < 8, "only where nothing but the close was left to fail"


@pytest.mark.slow
def test_the_disk_full_from_any_write_on_loses_nothing_acknowledged() -> None:
    """ENOSPC at the n-th write, for every n: refused clearly, all that was acknowledged is there."""
    growing = ("create", "fill", "write")
    for number in range(1, sum(method in growing for method in CALLS) + 1):
        disk, seen = Disk(), []
        files = Faults(
            disk,
            lambda _, method, seen=seen, number=number: (
                method in growing and (seen.append(method) or len(seen) >= number)
            ),
            errno.ENOSPC,
        )
        recorder = Recorder(disk, files)
        recorder.run()
        disk.after_kill()
        judge(recorder, recorded=False)


@pytest.mark.slow
def test_a_second_fault_while_recovering_from_the_first_loses_nothing() -> None:
    """Each sync fails once, and then each of the next six calls, which is where the recovery is."""
    syncs = [number for number, method in enumerate(CALLS, 1) if method == "sync"]
    for first in syncs:
        for gap in range(1, 7):
            disk = Disk()
            files = Faults(disk, lambda call, _, pair=(first, first + gap): call in pair)
            recorder = Recorder(disk, files)
            recorded = recorder.run()
            assert recorded, (first, gap, files.failed)
            judge(recorder, recorded)


def test_a_failed_sync_begins_a_new_segment_and_is_told() -> None:
    disk = Disk()
    fails = {"sync": False}
    files = Faults(disk, lambda _, method: method == "sync" and fails.pop("sync", False))
    journal = Journal.create(FOLDER, STREAM, segment_bytes=SEGMENT_BYTES, files=files)
    journal.append_packed(PIECES[0])
    journal.sync()
    journal.append_packed(PIECES[1])
    fails["sync"] = True
    assert journal.sync() == PIECES[1].last_sequence, "the caller sees an acknowledgement, the record a flag"
    assert journal.faults == ("sync of segment-00000001: injected",)
    journal.close()
    verified = JournalReader(FOLDER, files=disk).verify()
    assert (verified.segments, verified.after_error) == (2, 1)


def test_a_full_disk_is_refused_before_the_run_with_the_arithmetic() -> None:
    disk = Disk(room_bytes=8192 + 3 * SEGMENT_BYTES)
    journal = Journal.create(FOLDER, STREAM, segment_bytes=SEGMENT_BYTES, files=disk)
    with pytest.raises(RecordingError, match=r"needs 1\.0 MiB for the planned length, .* has 0\.0 MiB"):
        journal.prepare(1 << 20)
    journal.prepare(2 * 2000)
    for piece in PIECES[:8]:
        journal.append_packed(piece)
        journal.sync()
    disk.room_bytes = 0  # somebody else has taken the rest
    refused, known = 0, None
    for piece in PIECES[8:]:
        try:
            journal.append_packed(piece)
        except RecordingError as error:
            refused += 1
            known = error.last_sequence
            disk.room_bytes = 1 << 20
            journal.append_packed(piece)
    assert refused == 1, "the prepared room was used up first"
    assert known is not None
    assert known >= PIECES[7].last_sequence
    journal.close()
    assert b"".join(p.data for p in JournalReader(FOLDER, files=disk).iterate_packed()) == ALL


def test_a_checkpoint_that_cannot_be_written_is_told_and_nothing_else() -> None:
    disk = Disk()
    failing = {"write": False}
    files = Faults(disk, lambda _, method: failing.get(method, False))
    journal = Journal.create(FOLDER, STREAM, segment_bytes=SEGMENT_BYTES, files=files)
    journal._vouched = -1
    failing["write"] = True
    assert journal.sync() == 0
    assert journal.faults == ("checkpoint: injected",)
    failing["write"] = False
    journal.append_packed(PIECES[0])
    journal.close()
    assert JournalReader(FOLDER, files=disk).verify().entries == PIECES[0].count
