"""Ring and journal between real processes: killed at random and resumed; a second reader beside them."""

import os
import signal
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from random import Random

import pytest

from daq.errors import RecordingError
from daq.stream.entry import Kind
from daq.stream.journal import Journal
from daq.stream.journal_reader import JournalReader
from daq.stream.ring import Ring, RingReader, RingWriter, drain

pytestmark = [pytest.mark.slow, pytest.mark.processes]

STREAM = 0xD1E
KILLS = 20
RECORDER = Path(__file__).with_name("killed_recorder.py")


class Bench:
    """Writes numbered pairs whose content follows from their number."""

    def __init__(self, writer: RingWriter) -> None:
        self.writer = writer
        self.pairs = 0

    def write(self, pairs: int) -> None:
        for _ in range(pairs):
            text = f"{self.pairs} ".encode() * (1 + self.pairs % 40)
            assert self.writer.append_batch(
                [(Kind.RAW, self.pairs, text), (Kind.BLOCK, self.pairs, text[::-1])]
            )
            self.pairs += 1


@pytest.fixture
def bench(tmp_path: Path) -> Iterator[Bench]:
    writer = Ring.create(tmp_path / "ring", 8 << 20, STREAM)
    yield Bench(writer)
    writer.close()


def start(tmp_path: Path) -> subprocess.Popen:
    command = [sys.executable, str(RECORDER), str(tmp_path / "ring"), str(tmp_path / "journal")]
    return subprocess.Popen(command, stdout=subprocess.PIPE, text=True)


def kill(child: subprocess.Popen) -> None:
    child.send_signal(signal.SIGKILL)
    child.communicate()


def judge(tmp_path: Path, bench: Bench) -> None:
    """Nothing lost, nothing twice, nothing altered."""
    entries = list(JournalReader(tmp_path / "journal").iterate())
    assert [e.sequence for e in entries] == list(range(1, 2 * bench.pairs + 1))
    for number in range(bench.pairs):
        raw, block = entries[2 * number : 2 * number + 2]
        assert (raw.kind, block.kind) == (Kind.RAW, Kind.BLOCK)
        assert raw.payload.split()[0] == str(number).encode()
        assert raw.payload == block.payload[::-1]


def test_a_recorder_killed_at_random_loses_and_doubles_nothing(tmp_path: Path, bench: Bench) -> None:
    rng = Random(11)
    for _ in range(KILLS):
        child = start(tmp_path)
        assert child.stdout is not None
        before = bench.writer.acked_sequence
        bench.write(rng.randint(1, 60))
        for _ in range(rng.randint(0, 3)):  # killed while opening, or so many syncs later
            child.stdout.readline()
            bench.write(rng.randint(1, 60))
        for _ in range(rng.randint(0, 20)):  # and anywhere within the next ones
            bench.write(1)
        kill(child)
        assert bench.writer.acked_sequence >= before
    child = start(tmp_path)
    bench.writer.close()
    out, _ = child.communicate(timeout=30)
    assert child.returncode == 0
    assert int(out.split()[-1]) == 2 * bench.pairs
    judge(tmp_path, bench)
    assert JournalReader(tmp_path / "journal").verify().closed


def test_a_station_that_only_looks_on_sees_everything_or_says_how_much_not(
    tmp_path: Path, bench: Bench
) -> None:
    station = RingReader(tmp_path / "ring", newest=True)
    child = start(tmp_path)
    seen = 0
    for _ in range(400):
        bench.write(25)
        seen += len(station.read_new())
    while found := station.read_new():
        seen += len(found)
    bench.writer.close()
    child.communicate(timeout=30)
    assert seen + station.missing_entries == 2 * bench.pairs
    judge(tmp_path, bench)


def test_a_ring_left_by_a_killed_bench_is_drained_into_its_journal(tmp_path: Path) -> None:
    """Bench and recorder die together; the next start finds the ring and completes the journal."""
    code = (
        "import sys, time\n"
        "from daq.stream.ring import Ring\n"
        "from daq.stream.entry import Kind\n"
        f"writer = Ring.create(sys.argv[1], 1 << 20, {STREAM})\n"
        "for number in range(100):\n"
        "    text = f'{number} '.encode()\n"
        "    writer.append_batch([(Kind.RAW, number, text), (Kind.BLOCK, number, text[::-1])])\n"
        "print('written', flush=True)\n"
        "time.sleep(60)\n"
    )
    ring = tmp_path / "ring"
    child = subprocess.Popen([sys.executable, "-c", code, str(ring)], stdout=subprocess.PIPE, text=True)
    assert child.stdout is not None
    assert child.stdout.readline() == "written\n"
    reader = RingReader(ring)
    with Journal.create(tmp_path / "journal", reader.stream_id, segment_bytes=1 << 16) as journal:
        piece = reader.read_packed(2000)
        assert piece is not None
        journal.append_packed(piece)
    with pytest.raises(RecordingError, match="living"):
        next(drain(ring))
    assert not reader.finished()
    kill(child)
    journal = Journal.resume(tmp_path / "journal", segment_bytes=1 << 16)
    for piece in drain(ring, after_sequence=journal.last_sequence):
        journal.append_packed(piece)
    journal.close()
    os.unlink(ring)
    bench = Bench.__new__(Bench)
    bench.pairs = 100
    judge(tmp_path, bench)
