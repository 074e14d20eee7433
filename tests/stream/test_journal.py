"""The journal on the real file system: written, tailed, resumed, thinned out, tampered with."""

from dataclasses import replace
from pathlib import Path
from random import Random

import pytest
from made_entries import STREAM, entries, packed

from daq.errors import RecordDamaged, RecordingError
from daq.stream.checkpoint import Checkpoint, pack_checkpoint
from daq.stream.entry import Entry, Kind
from daq.stream.files import OsFiles
from daq.stream.journal import UNSYNCED_BYTES_MAX, Journal
from daq.stream.journal_reader import JournalReader
from daq.stream.payloads import pack_event
from daq.stream.segments import BATCH_HEADER_BYTES, BODY_OFFSET, segment_name

SEGMENT_BYTES = 1 << 14


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    return tmp_path / "journal"


def write(journal: Journal, first: int, batches: int, seed: int = 0, each: int = 3) -> list[Entry]:
    """Batches of `each` entries, one sync per batch."""
    rng = Random(seed)
    listed = entries(first, batches * each, rng)
    for at in range(0, len(listed), each):
        journal.append(listed[at : at + each])
        journal.sync()
    return listed


def segments(folder: Path) -> list[str]:
    return sorted(path.name for path in folder.iterdir() if path.name.startswith("segment"))


def test_what_was_appended_is_read_back(folder: Path) -> None:
    with Journal.create(folder, STREAM, segment_bytes=SEGMENT_BYTES) as journal:
        assert journal.last_sequence == journal.synced_sequence == 0
        written = write(journal, 1, 100)
        assert journal.last_sequence == journal.synced_sequence == 300
        chain = journal.chain
    reader = JournalReader(folder)
    assert list(reader.iterate()) == written
    assert list(reader.iterate(from_sequence=151)) == written[150:]
    assert reader.read_new(1 << 30) == written
    assert reader.read_new() == []
    assert reader.stream_id == STREAM
    verified = reader.verify()
    assert (verified.entries, verified.first_sequence, verified.last_sequence) == (300, 1, 300)
    assert (verified.undeclared_holes, verified.after_error, verified.closed) == (0, 0, True)
    assert verified.chain == reader.chain == chain
    assert verified.segments == len(segments(folder)) > 3, "the journal went over several segments"
    assert not any(name.startswith("spare") for name in (path.name for path in folder.iterdir()))


def test_the_chain_is_sha256_over_batches_in_order(folder: Path) -> None:
    """Computed with hashlib from the file's bytes and the documented layout alone."""
    import hashlib

    piece = packed(1, 4, Random(0))
    with Journal.create(folder, STREAM, segment_bytes=SEGMENT_BYTES) as journal:
        journal.append_packed(piece)
        data = (folder / segment_name(1)).read_bytes()
        start = hashlib.sha256(b"MsSeg\0\0\1" + STREAM.to_bytes(8, "little")).digest()
        head = data[BODY_OFFSET : BODY_OFFSET + BATCH_HEADER_BYTES - 32]
        assert data[BODY_OFFSET + BATCH_HEADER_BYTES :].startswith(piece.data)
        assert journal.chain == hashlib.sha256(start + head + piece.data).digest()


def test_a_reader_tails_what_is_appended_or_only_what_is_synced(folder: Path) -> None:
    eager, patient = JournalReader(folder), JournalReader(folder, synced_only=True)
    assert eager.read_new() == patient.read_new() == []
    journal = Journal.create(folder, STREAM, segment_bytes=SEGMENT_BYTES)
    assert eager.read_new() == patient.read_new() == []
    first, second = entries(1, 2, Random(1)), entries(3, 2, Random(2))
    journal.append(first)
    assert (eager.read_new(), patient.read_new()) == (first, [])
    journal.sync()
    assert (eager.read_new(), patient.read_new()) == ([], first)
    journal.append(second)
    assert (eager.read_new(), patient.read_new()) == (second, [])
    journal.close()
    assert (eager.read_new(), patient.read_new()) == ([], second)


@pytest.mark.parametrize("seed", range(3))
def test_tailing_over_rolls_and_restarts_shows_each_entry_once(folder: Path, seed: int) -> None:
    rng = Random(seed)
    reader, late = JournalReader(folder), JournalReader(folder, after_sequence=20)
    written: list[Entry] = []
    seen: list[Entry] = []
    journal = Journal.open(folder, STREAM, segment_bytes=SEGMENT_BYTES)
    for _ in range(60):
        batch = entries(len(written) + 1, rng.randint(1, 9), rng)
        journal.append(batch)
        written += batch
        if rng.random() < 0.5:
            journal.sync()
        if rng.random() < 0.5:
            seen += reader.read_new()
        if rng.random() < 0.1:
            abandon(journal)
            journal = Journal.open(folder, STREAM, segment_bytes=SEGMENT_BYTES)
            assert journal.last_sequence == len(written), "a killed process loses nothing it has written"
    journal.close()
    seen += reader.read_new(1 << 30)
    assert seen == written
    assert late.read_new(1 << 30) == written[20:]


def abandon(journal: Journal) -> None:
    """As when its process is killed: the lock goes, nothing is synced or closed."""
    journal._files.close(journal._lock)


def test_one_writer_at_a_time(folder: Path) -> None:
    journal = Journal.create(folder, STREAM, segment_bytes=SEGMENT_BYTES)
    with pytest.raises(RecordingError, match="another process"):
        Journal.resume(folder)
    journal.close()
    journal.close()
    with pytest.raises(RecordingError, match="resume"):
        Journal.create(folder, STREAM)
    with pytest.raises(RecordingError, match="stream"):
        Journal.open(folder, STREAM + 1, segment_bytes=SEGMENT_BYTES)
    Journal.open(folder, STREAM, segment_bytes=SEGMENT_BYTES).close()


def test_there_must_be_something_to_resume(folder: Path) -> None:
    folder.mkdir()
    with pytest.raises(RecordingError, match="no journal"):
        Journal.resume(folder)
    with pytest.raises(RecordDamaged, match="no segment"):
        JournalReader(folder).verify()


def test_numbers_must_rise(folder: Path) -> None:
    with Journal.create(folder, STREAM, segment_bytes=SEGMENT_BYTES) as journal:
        journal.append(entries(1, 3, Random(0)))
        with pytest.raises(RecordingError, match="entry 3 after entry 3"):
            journal.append(entries(3, 3, Random(0)))
        journal.append([])
        journal.append(entries(4, 1, Random(0)))
    assert JournalReader(folder).verify().entries == 4


def test_a_batch_larger_than_a_segment_gets_a_larger_one(folder: Path) -> None:
    piece = packed(1, 400, Random(0))
    assert len(piece.data) > 2 * SEGMENT_BYTES
    with Journal.create(folder, STREAM, segment_bytes=SEGMENT_BYTES) as journal:
        journal.append_packed(piece)
    assert JournalReader(folder).read_packed() == piece


def test_memory_is_bounded_while_nothing_can_be_synced(folder: Path) -> None:
    piece = packed(1, 1, Random(0))
    with Journal.create(folder, STREAM, segment_bytes=SEGMENT_BYTES) as journal:
        journal._writer.unsynced_bytes = UNSYNCED_BYTES_MAX  # as after half a minute of failing syncs
        with pytest.raises(RecordingError, match="64 MiB wait"):
            journal.append_packed(piece)
        journal._writer.unsynced_bytes = 0


def test_room_is_prepared_ahead_or_refused_with_the_arithmetic(folder: Path) -> None:
    journal = Journal.create(folder, STREAM, segment_bytes=SEGMENT_BYTES)
    journal.prepare(100_000)
    assert journal.free_bytes >= 100_000
    before = {path.name for path in folder.iterdir()}
    write(journal, 1, 40)
    assert {path.name for path in folder.iterdir()} < before | {segment_name(n) for n in range(9)}, (
        "none made new"
    )
    journal.close()
    with pytest.raises(RecordingError, match="journal"):
        Journal.create(folder.with_name("huge"), STREAM, segment_bytes=1 << 50)


def test_a_hole_must_be_declared_by_the_entry_behind_it(folder: Path) -> None:
    def loss(sequence: int, count: int) -> Entry:
        fields = {"event": "ring_loss", "time_s": 0.0, "severity": "stop", "entries": count}
        return Entry(Kind.EVENT, STREAM, sequence, 0, pack_event(fields))

    rng = Random(0)
    with Journal.create(folder, STREAM, segment_bytes=SEGMENT_BYTES) as journal:
        journal.append(entries(5, 2, rng))  # a stream may be joined late
        journal.append([loss(9, 2), *entries(10, 1, rng)])
        journal.append(entries(13, 1, rng))
        journal.append([loss(20, 3)])
    verified = JournalReader(folder).verify()
    assert verified.undeclared_holes == 2 + 6
    assert verified.entries == 6


# --- damage -----------------------------------------------------------------------------------------------
def made(folder: Path) -> list[Entry]:
    with Journal.create(folder, STREAM, segment_bytes=SEGMENT_BYTES) as journal:
        return write(journal, 1, 30, each=9)


def bodies(folder: Path) -> list[tuple[Path, int, int]]:
    """Segment, start and end of each batch, read off the files with the walk."""
    from daq.stream.journal_walk import Walk

    walk, places = Walk(folder, OsFiles()), []
    while (batch := walk.next_batch()) is not None:
        assert walk.segment is not None
        places.append((folder / segment_name(walk.segment.number), batch.start, batch.end))
    walk.close()
    return places


def test_any_flipped_byte_is_named_with_its_batch(folder: Path) -> None:
    written = made(folder)
    rng = Random(5)
    for path, start, end in bodies(folder):
        sound = path.read_bytes()
        for _ in range(2):
            place = rng.randrange(start, end)
            path.write_bytes(sound[:place] + bytes([sound[place] ^ 0x10]) + sound[place + 1 :])
            with pytest.raises(RecordDamaged, match=f"{path.name}, byte {start} "):
                JournalReader(folder).verify()
            shown: list[Entry] = []
            try:
                shown.extend(JournalReader(folder).iterate())
            except RecordDamaged:
                pass
            assert shown == written[: len(shown)]
        path.write_bytes(sound)
    JournalReader(folder).verify()


def test_swapped_and_repeated_batches_do_not_verify(folder: Path) -> None:
    """Each batch alone is sound; only the chain tells."""
    listed = [Entry(Kind.RAW, STREAM, sequence, 0, bytes(40)) for sequence in range(1, 9)]
    with Journal.create(folder, STREAM, segment_bytes=SEGMENT_BYTES) as journal:
        for at in range(0, 8, 2):
            journal.append(listed[at : at + 2])
    path = folder / segment_name(1)
    sound = path.read_bytes()
    (_, a, b), (_, _, c), (_, _, d), _ = bodies(folder)
    for forged in (
        sound[:a] + sound[b:c] + sound[a:b] + sound[c:],
        sound[:b] + sound[a:b] + sound[c:],
        sound[:b] + sound[c:d] + sound[c:],
        sound[:b] + sound[c:],
    ):
        path.write_bytes(forged)
        with pytest.raises(RecordDamaged):
            JournalReader(folder).verify()


def test_a_missing_segment_and_a_missing_end_do_not_verify(folder: Path) -> None:
    made(folder)
    names = segments(folder)
    assert len(names) > 2
    for name in names[1:]:
        away = (folder / name).rename(folder / "away")
        with pytest.raises(RecordDamaged):
            JournalReader(folder).verify()
        away.rename(folder / name)
    path, start, _ = bodies(folder)[-1]
    sound = path.read_bytes()
    path.write_bytes(sound[:start])
    with pytest.raises(RecordDamaged, match="acknowledged entries up to 270 are missing"):
        JournalReader(folder).verify()
    path.write_bytes(sound)
    JournalReader(folder).verify()


def test_nothing_may_stand_behind_the_end(folder: Path) -> None:
    with Journal.create(folder, STREAM, segment_bytes=SEGMENT_BYTES) as journal:
        journal.append(entries(1, 3, Random(0)))
    closed = (folder / "checkpoint").read_bytes()
    journal = Journal.resume(folder, segment_bytes=SEGMENT_BYTES)
    journal.append(entries(4, 3, Random(0)))
    journal.close()
    JournalReader(folder).verify()
    (folder / "checkpoint").write_bytes(closed)
    with pytest.raises(RecordDamaged, match="entries behind 3"):
        JournalReader(folder).verify()


def test_a_lost_or_torn_checkpoint_costs_nothing(folder: Path) -> None:
    journal = Journal.create(folder, STREAM, segment_bytes=SEGMENT_BYTES)
    written = write(journal, 1, 5)
    for damage in (lambda path: path.unlink(), lambda path: path.write_bytes(b"\x55" * 8192)):
        abandon(journal)
        damage(folder / "checkpoint")
        journal = Journal.resume(folder, segment_bytes=SEGMENT_BYTES)
        assert journal.last_sequence == len(written)
        written += write(journal, len(written) + 1, 2)
    journal.close()
    assert list(JournalReader(folder).iterate()) == written
    assert JournalReader(folder).verify().closed


def test_a_segment_of_another_journal_is_refused(folder: Path) -> None:
    made(folder)
    other = folder.with_name("other")
    with Journal.create(other, STREAM + 1, segment_bytes=SEGMENT_BYTES) as journal:
        listed = [Entry(Kind.RAW, STREAM + 1, 1, 0, b"x")]
        journal.append(listed)
    name = segments(folder)[-1]
    (folder / name).write_bytes((other / segment_name(1)).read_bytes())
    with pytest.raises(RecordDamaged, match="header"):
        JournalReader(folder).verify()
    with pytest.raises(RecordDamaged, match="header"):
        Journal.resume(folder)


# --- thinning out -----------------------------------------------------------------------------------------
def test_whole_segments_go_and_the_rest_stays_readable(folder: Path) -> None:
    journal = Journal.create(folder, STREAM, segment_bytes=SEGMENT_BYTES)
    written = write(journal, 1, 60)
    names = segments(folder)
    assert journal.delete_before(1) == 0
    assert journal.delete_before(100) > 0
    left = list(JournalReader(folder).iterate())
    assert left == written[-len(left) :]
    assert left[0].sequence <= 100 < left[0].sequence + 100
    JournalReader(folder).verify()
    journal.delete_before(10**9)
    assert segments(folder) == names[-1:]
    abandon(journal)
    journal = Journal.resume(folder, segment_bytes=SEGMENT_BYTES)
    more = write(journal, len(written) + 1, 1)
    assert journal.delete_before(10**9) == 1
    journal.close()
    assert list(JournalReader(folder).iterate(len(written) + 1)) == more


# --- rare meetings ----------------------------------------------------------------------------------------
def test_a_batch_that_does_not_hold_what_it_says_does_not_verify(folder: Path) -> None:
    """The chain vouches for bytes; verify also looks at the entries in them."""
    sound = packed(1, 3, Random(0))
    for forged in (
        replace(sound, count=2),
        replace(sound, last_sequence=4),
        replace(sound, newest_ns=1),
        replace(sound, data=b"\0" * 64),
        replace(sound, data=sound.data + b"\0" * 8),
    ):
        place = folder.with_name(f"forged-{id(forged)}")
        with Journal.create(place, STREAM, segment_bytes=SEGMENT_BYTES) as journal:
            journal.append_packed(forged)
        with pytest.raises(RecordDamaged, match=f"segment-00000001, byte {BODY_OFFSET}"):
            JournalReader(place).verify()


@pytest.mark.parametrize(("stream_id", "segment"), [(STREAM + 1, 1), (STREAM, 9)])
def test_a_checkpoint_of_something_else_is_refused(folder: Path, stream_id: int, segment: int) -> None:
    made(folder)
    point = Checkpoint(10**6, stream_id, segment, BODY_OFFSET, 10**6, bytes(32), closed=False)
    (folder / "checkpoint").write_bytes(pack_checkpoint(point))
    with pytest.raises(RecordDamaged):
        JournalReader(folder).verify()
    with pytest.raises(RecordDamaged, match="checkpoint"):
        Journal.resume(folder, segment_bytes=SEGMENT_BYTES)


class Interrupted(OsFiles):
    """The real files, with the recorder let run at the moment the reader looks at the folder."""

    def __init__(self) -> None:
        self.meanwhile: list = []

    def names(self, folder: Path) -> list[str]:
        while self.meanwhile:
            self.meanwhile.pop()()
        return super().names(folder)


def test_a_segment_finished_between_two_looks_is_not_taken_for_damage(folder: Path) -> None:
    journal = Journal.create(folder, STREAM, segment_bytes=SEGMENT_BYTES)
    files = Interrupted()
    reader = JournalReader(folder, files=files)
    written = write(journal, 1, 1)
    assert reader.read_new() == written
    files.meanwhile.append(lambda: written.extend(write(journal, 4, 60, seed=1)))
    seen = reader.read_new(1 << 30) + reader.read_new(1 << 30)
    assert len(segments(folder)) > 1
    assert seen == written[3:]
    journal.close()


class Vanishing(OsFiles):
    """Lists a segment that is gone by the time it is opened, once."""

    def __init__(self) -> None:
        self.open_calls = 0

    def open(self, path: Path, *, writable: bool) -> int:
        self.open_calls += 1
        if self.open_calls == 1:
            raise FileNotFoundError(path)
        return super().open(path, writable=writable)


def test_a_segment_removed_between_listing_and_opening_is_looked_for_again(folder: Path) -> None:
    written = made(folder)
    reader = JournalReader(folder, files=Vanishing())
    assert reader.read_new() == []
    assert reader.read_new(1 << 30) == written
