"""The ring: one writer, one acknowledging reader, others that may be overtaken; in one process."""

import os
from pathlib import Path
from random import Random

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.errors import RecordDamaged, RecordingError
from daq.stream.entry import ENTRY_BYTES_MAX, PAYLOAD_BYTES_MAX, Entry, Kind, entry_bytes
from daq.stream.payloads import unpack_event
from daq.stream.ring import NewEntry, Ring, RingAbsent, RingReader, RingWriter, drain, ring_bytes
from daq.stream.ring_file import PAGE_BYTES, RingFile, event_room_bytes
from daq.stream.ring_reader import _DAMAGED_POLLS_MAX

STREAM = 0x5EED
SMALL = PAGE_BYTES


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "ring"


def pair(number: int, length: int = 100) -> list[NewEntry]:
    return [(Kind.RAW, number, bytes([number % 256]) * length), (Kind.BLOCK, number, b"b" * length)]


def event(number: int, length: int = 50) -> NewEntry:
    return (Kind.EVENT, number, b"e" * length)


def losses(entries: list[Entry]) -> list[dict]:
    told = [unpack_event(e.payload) for e in entries if e.kind is Kind.EVENT and e.payload.startswith(b"{")]
    return [fields for fields in told if fields["event"] == "ring_loss"]


def test_entries_come_out_as_they_went_in_numbered_from_one(path: Path) -> None:
    writer = Ring.create(path, SMALL, STREAM)
    reader = RingReader(path)
    assert reader.read_new() == []
    assert writer.append_batch([*pair(7), event(8)])
    found = reader.read_new()
    assert [(e.kind, e.monotonic_ns, e.payload) for e in found] == [*pair(7), event(8)]
    assert [e.sequence for e in found] == [1, 2, 3]
    assert {e.stream_id for e in found} == {STREAM}
    assert reader.read_new() == []
    assert writer.append_batch([])


def test_only_the_owner_may_look_at_it(path: Path) -> None:
    Ring.create(path, SMALL, STREAM)
    assert path.stat().st_mode & 0o777 == 0o600


class Recorder:
    """An acknowledging reader, and all that it ever got."""

    def __init__(self, path: Path) -> None:
        self.reader = RingReader(path, after_sequence=0)
        self.got: list[Entry] = []

    def read(self, bytes_max: int) -> None:
        self.got += self.reader.read_new(bytes_max)

    def acknowledge(self) -> None:
        if self.got:
            self.reader.acknowledge(self.got[-1].sequence, 1)

    def read_all(self) -> None:
        while found := self.reader.read_new():
            self.got += found
        self.acknowledge()


@pytest.mark.slow
@settings(deadline=None, max_examples=25)
@given(st.integers(0, 2**32))
def test_whatever_the_pace_nothing_is_altered_doubled_or_silently_lost(tmp_path_factory, seed: int) -> None:
    """Against a plain list: what was admitted comes out, what was not is declared, entry by entry."""
    rng = Random(seed)
    path = tmp_path_factory.mktemp("ring") / "ring"
    writer = Ring.create(path, SMALL, STREAM)
    recorder = Recorder(path)
    offered: dict[int, NewEntry] = {}
    for step in range(100):
        batch = pair(step, rng.randint(0, 300)) if rng.random() < 0.8 else []
        batch += [event(step, rng.randint(0, 80)) for _ in range(rng.choice((0, 0, 0, 1, 2)))]
        before = writer.last_sequence
        writer.append_batch(batch)
        given_out = writer.last_sequence - before
        assert len(batch) <= given_out <= len(batch) + 1, "one more at most: the entry that tells a loss"
        offered.update({id(item): item for item in batch})
        if rng.random() < 0.4:
            recorder.read(rng.choice((60, 300, 4000)))
        if rng.random() < 0.3:
            recorder.acknowledge()
    recorder.read_all()
    writer.append_batch([event(1000)])
    recorder.read_all()

    told = losses(recorder.got)
    holes = [range(loss["first_sequence"], loss["last_sequence"] + 1) for loss in told]
    seen = [entry.sequence for entry in recorder.got]
    lost = [number for hole in holes for number in hole]
    assert sorted(seen + lost) == list(range(1, writer.last_sequence + 1))
    assert (
        len(lost) == writer.lost_entries == recorder.reader.missing_entries == sum(t["entries"] for t in told)
    )
    plain = [(e.kind, e.monotonic_ns, e.payload) for e in recorder.got if not losses([e])]
    remaining = iter([*offered.values(), event(1000)])
    assert all(any(item == candidate for candidate in remaining) for item in plain), "admitted ones, in order"
    blocks = sum(e.kind is Kind.BLOCK for e in recorder.got)
    assert blocks == sum(e.kind is Kind.RAW for e in recorder.got), "RAW and its BLOCK stand or fall together"


def test_a_full_ring_loses_counts_and_tells_it(path: Path) -> None:
    writer = Ring.create(path, SMALL, STREAM)
    recorder = Recorder(path)
    admitted = 0
    while writer.append_batch(pair(admitted)):
        admitted += 1
    assert writer.lost_entries == 2
    assert not writer.append_batch(pair(99))
    assert writer.lost_entries == 4
    assert recorder.reader.lost_entries == 4
    recorder.read_all()
    assert len(recorder.got) == 2 * admitted
    assert writer.append_batch(pair(100)), "room again"
    recorder.read_all()
    (loss,) = losses(recorder.got)
    first = 2 * admitted + 1
    assert (loss["first_sequence"], loss["last_sequence"], loss["entries"]) == (first, first + 3, 4)
    assert loss["bytes"] == 4 * entry_bytes(100)
    assert loss["severity"] == "stop"
    assert [e.sequence for e in recorder.got[2 * admitted :]] == [first + 4, first + 5, first + 6]


def test_events_have_room_that_samples_may_not_use(path: Path) -> None:
    writer = Ring.create(path, 16 * SMALL, STREAM)
    while writer.append_batch(pair(1)):
        pass
    free = writer.capacity - writer.lag_bytes
    assert event_room_bytes(writer.capacity) <= free
    assert writer.append_batch([event(2)])
    found = RingReader(path).read_new(1 << 20)
    assert losses(found[-2:])
    assert found[-1].payload == event(2)[2]


def test_a_batch_that_does_not_fit_keeps_its_events(path: Path) -> None:
    writer = Ring.create(path, 16 * SMALL, STREAM)
    while writer.append_batch(pair(1)):
        pass
    before = writer.lost_entries
    assert writer.append_batch([*pair(3), event(4), event(5)]) is False
    assert writer.lost_entries == before + 2
    found = RingReader(path).read_new(1 << 20)
    assert [e.payload for e in found if e.monotonic_ns in (3, 4, 5) and not losses([e])] == [
        event(4)[2],
        event(5)[2],
    ]


def test_an_oversized_payload_is_a_loss_not_an_exception(path: Path) -> None:
    writer = Ring.create(path, 4 << 20, STREAM)
    assert not writer.append_batch([(Kind.EVENT, 1, bytes(PAYLOAD_BYTES_MAX + 1))])
    assert writer.append_batch([(Kind.EVENT, 1, bytes(PAYLOAD_BYTES_MAX))])
    reader = RingReader(path)
    found = reader.read_new(1000) + reader.read_new(1000)
    assert losses(found)[0]["entries"] == 1
    assert len(found[1].payload) == ENTRY_BYTES_MAX - 40


def test_a_loss_still_untold_is_told_at_the_close(path: Path) -> None:
    writer = Ring.create(path, SMALL, STREAM)
    reader = RingReader(path)
    while writer.append_batch(pair(1)):
        pass
    writer.close()
    writer.close()
    assert not reader.finished(), "there is something to read"
    assert losses(reader.read_new(1 << 20))[0]["entries"] == 2
    assert reader.finished()


def test_an_overtaken_reader_goes_on_at_the_acknowledged_place_and_counts(path: Path) -> None:
    writer = Ring.create(path, SMALL, STREAM)
    recorder, slow = Recorder(path), RingReader(path)
    writer.append_batch(pair(0))
    shown = slow.read_new()
    for number in range(1, 200):
        assert writer.append_batch(pair(number))
        recorder.read_all()
    writer.append_batch(pair(200))
    shown += slow.read_new()
    assert slow.overtaken == 1
    assert [e.monotonic_ns for e in shown] == [0, 0, 200, 200]
    assert slow.missing_entries == 2 * 199
    assert not losses(shown)


def test_overtaken_while_it_copies(path: Path) -> None:
    """The writer runs on between the copy and the look at its words: the torn copy is thrown away."""
    writer = Ring.create(path, SMALL, STREAM)
    recorder, reader = Recorder(path), RingReader(path)
    writer.append_batch(pair(0))
    copy = reader._ring.read

    def interrupted(start: int, end: int) -> bytes:
        data = copy(start, end)
        for number in range(1, 60):
            writer.append_batch(pair(number))
            recorder.read_all()
        writer.append_batch(pair(60))
        reader._ring.read = copy  # type: ignore[method-assign]
        return data

    reader._ring.read = interrupted  # type: ignore[method-assign]
    assert [e.monotonic_ns for e in reader.read_new()] == [60, 60]
    assert reader.overtaken == 1


def test_a_late_reader_starts_where_it_is_told(path: Path) -> None:
    writer = Ring.create(path, SMALL, STREAM)
    recorder = Recorder(path)
    writer.append_batch(pair(1))
    recorder.read_all()
    writer.append_batch([event(2)])
    newest, oldest, resumed = (
        RingReader(path, newest=True),
        RingReader(path),
        RingReader(path, after_sequence=3),
    )
    writer.append_batch([event(3)])
    assert [e.sequence for e in newest.read_new()] == [4]
    assert [e.sequence for e in oldest.read_new()] == [3, 4]
    assert [e.sequence for e in resumed.read_new()] == [4]
    assert newest.missing_entries == oldest.missing_entries == resumed.missing_entries == 0
    assert RingReader(path, after_sequence=1).read_new() and writer.acked_sequence == 2


def test_the_acknowledgement_reaches_the_writer(path: Path) -> None:
    writer = Ring.create(path, SMALL, STREAM)
    reader = RingReader(path)
    assert (writer.acked_sequence, writer.acked_ns) == (0, 0)
    writer.append_batch(pair(1))
    writer.append_batch([event(2)])
    assert len(reader.read_new(entry_bytes(100) * 2)) == 2
    assert len(reader.read_new()) == 1
    lag = writer.lag_bytes
    reader.acknowledge(2, 555)
    assert (writer.acked_sequence, writer.acked_ns) == (2, 555)
    assert writer.lag_bytes == lag - 2 * entry_bytes(100)
    reader.acknowledge(3, 556)
    assert writer.lag_bytes == 0
    reader.acknowledge(1, 557)
    assert (writer.acked_sequence, writer.lag_bytes) == (3, 0), "never backwards"


def test_an_acknowledgement_that_makes_no_sense_frees_nothing(path: Path) -> None:
    writer = Ring.create(path, SMALL, STREAM)
    writer.append_batch(pair(1))
    RingFile.open(path, writable=True).words[16] = 1 << 40
    assert not writer.append_batch(pair(2))
    assert writer.lost_entries == 2


def test_a_damaged_ring_is_told_with_its_place(path: Path) -> None:
    writer = Ring.create(path, SMALL, STREAM)
    writer.append_batch(pair(1))
    writer.append_batch(pair(2))
    with path.open("r+b") as file:
        file.seek(PAGE_BYTES + 2 * entry_bytes(100) + 50)
        file.write(b"\xff")
    reader = RingReader(path)
    assert [e.monotonic_ns for e in reader.read_new()] == [1, 1], "what stands before it is good"
    for _ in range(_DAMAGED_POLLS_MAX - 1):
        assert reader.read_new() == []
    with pytest.raises(RecordDamaged, match=f"position {2 * entry_bytes(100)}"):
        reader.read_new()


def test_a_write_that_fails_is_a_loss_and_not_the_end_of_the_bench(path: Path) -> None:
    writer = Ring.create(path, SMALL, STREAM)
    sound = writer._ring.descriptor
    writer._ring.descriptor = os.open(path, os.O_RDONLY)
    assert not writer.append_batch(pair(1))
    os.close(writer._ring.descriptor)
    writer._ring.descriptor = sound
    assert writer.append_batch(pair(2))
    found = RingReader(path).read_new()
    assert [e.sequence for e in found] == [3, 4, 5]
    assert losses(found)[0]["entries"] == 2


# --- life and death of the file ---------------------------------------------------------------------------
def test_a_ring_that_does_not_fit_is_refused_with_the_arithmetic(path: Path) -> None:
    with pytest.raises(RecordingError, match=r"ring of 1073741824\.0 MiB does not fit: .* MiB free"):
        Ring.create(path, 1 << 50, STREAM)
    assert not path.exists()


def test_an_existing_ring_is_never_overwritten(path: Path) -> None:
    writer = Ring.create(path, SMALL, STREAM)
    writer.append_batch(pair(1))
    with pytest.raises(RecordingError, match="exists"):
        Ring.create(path, SMALL, STREAM)
    assert len(RingReader(path).read_new()) == 2
    with pytest.raises(RecordingError, match="folder"):
        Ring.create(path.parent / "absent" / "ring", SMALL, STREAM)


def test_a_ring_that_is_not_there_or_not_ready_is_absent(path: Path) -> None:
    with pytest.raises(RingAbsent):
        RingReader(path)
    with pytest.raises(RingAbsent):
        list(drain(path))
    path.write_bytes(bytes(3 * PAGE_BYTES))  # its creator died before the magic word
    with pytest.raises(RingAbsent):
        RingReader(path)
    assert list(drain(path)) == []
    path.write_bytes(b"")
    assert list(drain(path)) == []


def abandon(writer: RingWriter) -> None:
    """As when its process is killed: the lock is gone, the closed word was never set."""
    writer._ring.close()


def test_a_leftover_ring_is_drained_behind_what_the_journal_holds(path: Path) -> None:
    writer = Ring.create(path, SMALL, STREAM)
    recorder = Recorder(path)
    for number in range(60):  # several times round
        writer.append_batch(pair(number))
        recorder.read_all()
    for number in range(60, 64):
        writer.append_batch(pair(number))
    with pytest.raises(RecordingError, match="living"):
        list(drain(path))
    abandon(writer)
    assert [e.sequence for piece in drain(path) for e in piece.entries()] == list(range(121, 129))
    assert [e.sequence for piece in drain(path, after_sequence=125) for e in piece.entries()] == [
        126,
        127,
        128,
    ]
    assert list(drain(path, after_sequence=128)) == []


def test_a_reader_sees_the_end_of_its_writer(path: Path) -> None:
    writer = Ring.create(path, SMALL, STREAM)
    reader = RingReader(path)
    writer.append_batch([event(1)])
    assert not reader.finished()
    reader.read_new()
    assert not reader.finished()
    abandon(writer)
    assert reader.finished()
    reader.close()
    reader.close()


def test_a_ring_leaves_no_descriptor_open(path: Path) -> None:
    before = len(os.listdir("/proc/self/fd"))
    writer = Ring.create(path, SMALL, STREAM)
    reader = RingReader(path)
    writer.append_batch([event(1)])
    reader.acknowledge(reader.read_new()[-1].sequence, 1)
    writer.close()
    reader.close()
    list(drain(path))
    assert len(os.listdir("/proc/self/fd")) == before


def test_the_size_is_a_minute_of_bytes_in_whole_pages() -> None:
    assert ring_bytes(130e3) == -(-130_000 * 60 // 4096) * 4096
    assert ring_bytes(130e3, 1.0) == 1 << 20, "small ones hold the largest entry"
    assert ring_bytes(1.7e6) % 4096 == 0
