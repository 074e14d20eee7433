"""The virtual frame as a process: real pseudo-terminal, real TCP, real hands. Waits for facts, never sleeps."""

from __future__ import annotations

import json
import os
import select
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest
import serial

from daq.cards.frame import FrameCard
from daq.cards.load import load_frame
from daq.errors import DriverOpenError
from drivers.registry import decoder_for
from simulator.ports import PtyPort, TcpPort, open_port
from simulator.wire import run_wire

pytestmark = [pytest.mark.slow, pytest.mark.processes]
WAIT_S = 20.0


class Played:
    """A running virtual frame."""

    def __init__(self, folder: Path, frame: Path, process: subprocess.Popen[str]) -> None:
        self.folder, self.process, self.frame = folder, process, load_frame(frame)
        self._hands = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
        self._hands.bind(str(folder / "me"))
        self._hands.settimeout(WAIT_S)

    def hand(self, **line: object) -> dict[str, object]:
        self._hands.sendto(json.dumps(line).encode(), str(self.folder / "hands"))
        return json.loads(self._hands.recv(65536))

    def rest(self) -> None:
        self._hands.close()

    def end(self) -> str:
        """Its last words."""
        self.process.send_signal(signal.SIGTERM)
        _, words = self.process.communicate(timeout=WAIT_S)
        return words


@contextmanager
def played(folder: Path, frame: Path, *more: str) -> Iterator[Played]:
    command = [
        sys.executable,
        "-m",
        "simulator.wire",
        str(frame),
        "--hands",
        "hands",
        "--truth",
        "truth",
        *more,
    ]
    process = subprocess.Popen(command, cwd=folder, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    try:
        assert process.stdout is not None and " link main: " in process.stdout.readline()
        until(lambda: (folder / "hands").exists(), "the hands")
        machine = Played(folder, frame, process)
        try:
            yield machine
        finally:
            machine.rest()
    finally:
        if process.poll() is None:
            process.kill()
        process.communicate()


def until(test: Callable[[], bool], what: str) -> None:
    end_s = time.monotonic() + WAIT_S
    while not test():
        assert time.monotonic() < end_s, f"waited too long for {what}"
        select.select([], [], [], 0.005)


def read_rows(fd: int, frame: FrameCard, rows: int) -> tuple[list[int], list[bytes], int, int]:
    """(indices of first rows, replies, rejected, gaps) until so many rows came."""
    decoder, firsts, replies, rejected, gaps, seen = decoder_for(frame, 0), [], [], 0, 0, 0
    end_s = time.monotonic() + WAIT_S
    while seen < rows:
        assert time.monotonic() < end_s, f"{seen} of {rows} rows"
        ready, _, _ = select.select([fd], [], [], 0.1)
        if not ready:
            continue
        decoded = decoder.feed(os.read(fd, 65536), time.monotonic())
        for block in decoded.blocks:
            firsts.append(block.first_index)
            gaps += block.gap_samples
            seen += block.count
        replies += decoded.replies
        rejected += sum(decoded.rejected.values())
    return firsts, replies, rejected, gaps


def hung_up(fd: int) -> bool:
    poll = select.poll()
    poll.register(fd, 0)
    return any(events & select.POLLHUP for _, events in poll.poll(0))


def test_a_pty_round_trip(tmp_path, shipped):
    with played(tmp_path, shipped / "kiln-lane-a.toml") as machine:
        assert machine.hand(mount={"number": "A-1", "strength_mpa": 300.0}) == {"mounted": "A-1"}
        with serial.Serial(str(tmp_path / "kiln-lane-a.tty"), 460_800, timeout=0) as port:
            port.write(b"?\r\nV+6.000\r\n")
            _, replies, rejected, gaps = read_rows(port.fileno(), machine.frame, 500)
            assert replies == [b"ST=R", b"OK V"]
            assert (rejected, gaps) == (0, 0)
            port.write(b"S\r\n")
            _, replies, _, _ = read_rows(port.fileno(), machine.frame, 300)
            assert replies == [b"OK S"]
        truth = machine.hand(query=True)
        assert truth["speed_mm_s"] == 0.0 and truth["position_mm"] > 0.03
        words = machine.end()
    assert machine.process.returncode == 0
    assert "rows_made=" in words
    assert not (tmp_path / "kiln-lane-a.tty").is_symlink()
    assert not (tmp_path / "hands").exists()
    facts = [json.loads(line)["what"] for line in (tmp_path / "truth").read_text().splitlines()]
    assert facts[0] == "mounted"


def test_another_speed_is_garbage_and_the_right_one_is_not(tmp_path, shipped):
    with played(tmp_path, shipped / "kiln-lane-a.toml") as machine:
        name = str(tmp_path / "kiln-lane-a.tty")
        with serial.Serial(name, 115_200, timeout=WAIT_S) as port:
            port.reset_input_buffer()
            port.read(64)
            wrong = port.read(512)
            assert decoder_for(machine.frame, 0).feed(wrong, 0.0).blocks == ()
        with serial.Serial(name, 460_800, timeout=0) as port:
            read_rows(port.fileno(), machine.frame, 100)


def test_rows_keep_pace_and_do_not_drift(tmp_path, shipped):
    """1 kHz by the monotonic clock; a busy computer may hold a row back, but never shift the schedule."""
    with (
        played(tmp_path, shipped / "kiln-lane-a.toml") as machine,
        serial.Serial(str(tmp_path / "kiln-lane-a.tty"), 460_800, timeout=0) as port,
    ):
        looks = []
        for _ in range(2):
            before_s = time.monotonic()
            truth = machine.hand(query=True)
            looks.append((before_s, time.monotonic(), truth["time_s"]))
            assert truth["rows_made"] == pytest.approx(truth["time_s"] * 1000 + 1, abs=1.01)
            read_rows(port.fileno(), machine.frame, 600)
        (first_s, first_end_s, early_s), (second_s, second_end_s, late_s) = looks
        assert second_s - first_end_s <= late_s - early_s <= second_end_s - first_s


def test_what_nobody_reads_is_dropped_by_whole_pieces(tmp_path, make_frame):
    """Never waits; a late reader finds whole rows, and the loss is counted."""
    link = make_frame().links[0]
    port = PtyPort(link, tmp_path / "tty")
    rows = [b"D%05d,%s\r\n" % (number, b"x" * 90) for number in range(3000)]
    with serial.Serial(str(tmp_path / "tty"), 460_800, timeout=0) as reader:
        for row in rows:
            port.write(row)
        assert port.dropped_bytes > 0
        total, got = sum(map(len, rows)), bytearray()

        def all_accounted() -> bool:
            got.extend(reader.read(65536))
            port.write(b"")
            return len(got) + port.dropped_bytes >= total

        until(all_accounted, "the rest")
    assert len(got) + port.dropped_bytes == total
    assert set(bytes(got).split(b"\r\n")) <= {row[:-2] for row in rows} | {b""}
    port.close()


def test_unplugged_and_plugged_in_again(tmp_path, shipped):
    with played(tmp_path, shipped / "kiln-lane-a.toml") as machine:
        name = tmp_path / "kiln-lane-a.tty"
        port = serial.Serial(str(name), 460_800, timeout=0)
        read_rows(port.fileno(), machine.frame, 50)
        machine.hand(fault={"kind": "reconnect", "for_s": 0.3})
        until(lambda: hung_up(port.fileno()), "the line to hang up")
        port.close()
        until(name.exists, "the port's return")
        with serial.Serial(str(name), 460_800, timeout=0) as again:
            read_rows(again.fileno(), machine.frame, 50)


def test_a_tcp_round_trip_in_packets(tmp_path, shipped):
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        number = probe.getsockname()[1]
    card = tmp_path / "b.toml"
    card.write_text((shipped / "kiln-lane-b.toml").read_text().replace("27150", str(number)))
    with played(tmp_path, card) as machine, socket.create_connection(("127.0.0.1", number)) as line:
        line.sendall(b"MOVE +6.0000\r\n")
        _, replies, rejected, gaps = read_rows(line.fileno(), machine.frame, 300)
        assert (replies, rejected, gaps) == ([b"ok move"], 0, 0)
        with socket.create_connection(("127.0.0.1", number)) as second:
            second.settimeout(WAIT_S)
            assert second.recv(100) == b"", "one client at a time"
        assert machine.hand(shield="open") == {"shield": "open"}
        assert machine.hand(query=True)["inputs"]["shield_open"]
        read_rows(line.fileno(), machine.frame, 50)


@pytest.mark.parametrize(
    ("frame", "card", "says"),
    [
        ("missing.toml", None, "missing.toml"),
        (None, "card = 'simulator'\nname = 'x'", "bar = (missing)"),
        (None, "= 5", "Invalid statement"),
    ],
)
def test_bad_cards_end_in_one_clear_line(tmp_path, shipped, capsys, frame, card, says):
    (tmp_path / "bars.toml").write_text(card or "")
    code = run_wire(Path(frame) if frame else shipped / "kiln-lane-a.toml", tmp_path / "bars.toml")
    words = capsys.readouterr().err
    assert code == 2
    assert says in words and words.count("\n") == 1


def test_ports_refuse_what_is_not_theirs(tmp_path, make_frame):
    """No address but loopback; no file that is not a symbolic link is replaced."""
    link = make_frame("kiln-lane-b", host="192.0.2.1").links[0]
    with pytest.raises(DriverOpenError, match="loopback"):
        TcpPort(link)
    serial_link = make_frame().links[0]
    (tmp_path / "kiln-lane-a.tty").write_text("a note")
    with pytest.raises(DriverOpenError, match="something else"):
        PtyPort(serial_link, tmp_path / "kiln-lane-a.tty")
    assert (tmp_path / "kiln-lane-a.tty").read_text() == "a note"


def test_a_second_simulation_does_not_take_the_name_of_a_living_one(tmp_path, make_frame):
    """By whatever way the folder is reached; the name is free again once the first one has ended."""
    link = make_frame().links[0]
    (tmp_path / "other way").symlink_to(tmp_path)
    first = open_port(link, tmp_path)
    stands = os.readlink(tmp_path / "kiln-lane-a.tty")
    for folder in (tmp_path, tmp_path / "other way"):
        with pytest.raises(DriverOpenError, match="another simulation is running under this name"):
            open_port(link, folder)
    assert os.readlink(tmp_path / "kiln-lane-a.tty") == stands
    first.vanish()
    with pytest.raises(DriverOpenError, match="another simulation"):
        open_port(link, tmp_path)  # unplugged for a moment, not gone
    first.close()
    open_port(link, tmp_path).close()


def test_a_stale_link_is_replaced_and_a_port_in_use_is_told(tmp_path, make_frame):
    (tmp_path / "kiln-lane-a.tty").symlink_to("/nowhere")
    port = open_port(make_frame().links[0], tmp_path)
    assert os.path.realpath(tmp_path / "kiln-lane-a.tty").startswith("/dev/")
    port.close()
    with socket.create_server(("127.0.0.1", 0)) as taken:
        link = make_frame("kiln-lane-b", tcp_port=taken.getsockname()[1]).links[0]
        with pytest.raises(DriverOpenError, match="already in use"):
            open_port(link, tmp_path)
