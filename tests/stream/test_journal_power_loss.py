"""Power loss at any write: 20,000 disks as they may be found afterwards, each different one read and judged.

0 acknowledged entries lost, 0 wrong entries shown, whatever the disk kept of what had not been synced.
"""

from pathlib import Path
from random import Random

import pytest
from made_entries import STREAM, packed
from simulated_disk import Disk, Faults

from daq.errors import RecordingError
from daq.stream.entry import pack, unpack
from daq.stream.journal import Journal
from daq.stream.journal_reader import JournalReader

FOLDER = Path("journal")
SEGMENT_BYTES = 4096 + 1600  # a new segment every few batches


class Bench:
    """A recorder at work on a simulated disk; after each change of the disk a few power losses are tried."""

    def __init__(self, seed: int, images_per_change: int, steps: int = 30) -> None:
        self.steps = steps
        self.rng = Random(seed)
        self.disk = Disk()
        self.disk.after = self.strike
        self.images_per_change = images_per_change
        self.images = 0
        self.resumed = 0
        self.written = b""  # all entries ever appended, end to end
        self.starts = {1: 0}  # where in it an entry begins
        self.acknowledged_bytes = 0
        self.next_sequence = 1
        self.wanted_from = 1
        self.armed = True
        self.known: dict[object, bytes] = {}

    def run(self) -> None:
        faults = Faults(self.disk, lambda _, method: method == "sync" and self.rng.random() < 0.03)
        journal = self.begin(faults)
        for _ in range(self.steps):
            self.append(journal)
            if self.rng.random() < 0.1:  # killed with something appended and not synced
                self.disk.after_kill()
                self.disk.after = self.strike
                journal = self.begin(faults)
                assert journal.last_sequence == self.next_sequence - 1
            self.sync(journal)
        self.settle(journal.close)

    def begin(self, files: Faults) -> Journal:
        """Open until it succeeds: an injected fault while opening is one more kind of end."""
        while True:
            try:
                return Journal.open(FOLDER, STREAM, segment_bytes=SEGMENT_BYTES, files=files)
            except RecordingError as error:
                if "injected" not in str(error):
                    raise

    def append(self, journal: Journal) -> None:
        for _ in range(self.rng.randint(1, 5)):
            piece = packed(self.next_sequence, self.rng.randint(1, 4), self.rng)
            for entry in piece.entries():
                self.starts[entry.sequence] = len(self.written)
                self.written += pack(entry)  # from the first write on it may be found
            self.next_sequence += piece.count
            self.settle(lambda piece=piece: journal.append_packed(piece))

    def sync(self, journal: Journal) -> None:
        self.settle(journal.sync)
        self.acknowledged_bytes = len(self.written)
        if self.rng.random() < 0.3:
            self.wanted_from = max(self.wanted_from, self.next_sequence - 6)
            self.settle(lambda: journal.delete_before(self.wanted_from))

    def settle(self, call) -> None:
        """The recorder's policy: try again what could not be done."""
        while True:
            try:
                call()
                return
            except RecordingError as error:
                if "injected" not in str(error):
                    raise

    def strike(self) -> None:
        if self.armed:
            self.armed = False
            for _ in range(self.images_per_change if self.disk.undecided else 1):
                self.judge(self.disk.after_power_loss(self.rng))
            self.armed = True

    def judge(self, image: Disk) -> None:
        segments = tuple(
            (name, inode.durable) for name, inode in image.names_seen.items() if name.startswith("segment")
        )
        self.images += 1
        new = segments not in self.known
        if new:  # what a reader shows depends on the segments alone; what it must show is judged each time
            self.known[segments] = shown(image)
        found = self.known[segments]
        start = self.starts[unpack(found)[0].sequence] if found else 0
        assert self.written.startswith(found, start), (
            "an entry that was never written, twice, or out of order"
        )
        assert start <= self.starts[self.wanted_from], "an entry is gone that was to be kept"
        assert start + len(found) >= self.acknowledged_bytes, "an acknowledged entry is lost"
        if new and len(self.known) % 20 == 0 and any(name.startswith("segment") for name in image.names_seen):
            self.resumed += 1
            self.judge_resumed(image, found, start)

    def judge_resumed(self, image: Disk, found: bytes, start: int) -> None:
        """The next recorder goes on behind what was found; a second power loss meanwhile loses nothing."""
        again: list[bytes] = []
        image.after = lambda: again.append(shown(image.after_power_loss(self.rng)))
        journal = Journal.resume(FOLDER, segment_bytes=SEGMENT_BYTES, files=image)
        more = packed(journal.last_sequence + 1, 3, self.rng)
        journal.append_packed(more)
        journal.sync()
        for survivor in again:
            assert (found + more.data).startswith(survivor)
            assert start + len(survivor) >= self.acknowledged_bytes
        assert shown(image.after_power_loss(self.rng)) == found + more.data
        journal.close()
        verified = JournalReader(FOLDER, files=image).verify()
        assert verified.closed
        assert verified.last_sequence == more.last_sequence


def shown(disk: Disk) -> bytes:
    """What a reader makes of it."""
    return b"".join(piece.data for piece in JournalReader(FOLDER, files=disk).iterate_packed())


def test_no_acknowledged_entry_is_lost_and_no_wrong_one_shown_in_a_few_hundred_images() -> None:
    bench = Bench(seed=1, images_per_change=4, steps=8)
    bench.run()
    assert bench.images > 150


@pytest.mark.slow
def test_no_acknowledged_entry_is_lost_and_no_wrong_one_shown_in_20_000_images() -> None:
    pound(20_000, 1000)


@pytest.mark.soak
@pytest.mark.timeout(3600)
def test_no_acknowledged_entry_is_lost_and_no_wrong_one_shown_in_a_million_images() -> None:
    pound(1_000_000, 1_000_000)


def pound(images_wanted: int, first_seed: int) -> None:
    images, different, resumed, seed = 0, 0, 0, first_seed
    while images < images_wanted:
        bench = Bench(seed, images_per_change=6)
        bench.run()
        images += bench.images
        different += len(bench.known)
        resumed += bench.resumed
        seed += 1
    assert different > images_wanted / 6, "a disk that loses nothing new proves nothing new"
    assert resumed > images_wanted / 200


def test_the_simulated_disk_does_forget() -> None:
    """Without it the tests above would prove nothing: a journal that is never synced loses entries."""
    rng = Random(3)
    disk = Disk()
    journal = Journal.create(FOLDER, STREAM, segment_bytes=SEGMENT_BYTES, files=disk)
    piece = packed(1, 5, rng)
    journal.append_packed(piece)
    found = {shown(disk.after_power_loss(rng)) for _ in range(50)}
    assert found == {b"", piece.data}
