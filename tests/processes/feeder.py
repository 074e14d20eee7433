"""Feeder: a monitor-only instrument of any rate on a pty or TCP port, as a process. It plays noise and never moves.

The virtual frame makes its rows one by one and cannot keep up with 50 kS/s in real time. Here a whole turn of the
counter is encoded once and written over and over, in batches of a millisecond. What the port does not take is written
later, and where nobody reads it waits: no row is ever lost on this side, and their number is told at the end.
"""

from __future__ import annotations

import json
import os
import pty
import select
import signal
import socket
import sys
import time
import tty
from pathlib import Path
from types import FrameType

import numpy as np

from daq.cards.derived import force_channel, link_bytes_per_row
from daq.cards.frame import FrameCard
from daq.cards.load import load_frame
from drivers.registry import encoder_for

UINT16 = 65_536
BATCH_S = 0.001
CATCH_UP_S = 0.05  # of rows at most are written at once after a pause


class Turn:
    """The bytes of one turn of the counter, and where each row ends in them."""

    def __init__(self, frame: FrameCard) -> None:
        link = frame.links[0]
        modulus = link.lines.counter_modulus if link.lines is not None else UINT16
        assert modulus is not None
        channel, rng = force_channel(frame), np.random.default_rng(7)
        noise_n = frame.cell.noise_quiet_n or 0.0
        value_n = frame.cell.zero_balance_n + noise_n * rng.standard_normal(modulus)
        counts = np.rint((value_n * channel.sign - channel.offset) / channel.scale).reshape(-1, 1)
        self.bytes = encoder_for(frame, 0).encode(counts, first_counter=0)
        if link.packets is not None:
            self.ends = np.arange(1, len(counts) + 1) * link_bytes_per_row(link, frame)
        else:
            assert link.lines is not None
            end = link.lines.line_end.encode("latin-1")
            self.ends = np.cumsum([len(row) + len(end) for row in self.bytes.split(end)[:-1]])
        assert self.ends[-1] == len(self.bytes)

    def place(self, rows: int) -> int:
        """How many bytes that many rows take since the beginning."""
        turns, rest = divmod(rows, len(self.ends))
        return turns * len(self.bytes) + (int(self.ends[rest - 1]) if rest else 0)


class Feeder:
    """Writes what is due, for as long as it is let."""

    def __init__(self, frame: FrameCard, folder: Path) -> None:
        self._turn, self._rate_hz = Turn(frame), frame.links[0].rate_hz
        self._ended = False
        self._fd = _open_tcp(frame) if frame.links[0].kind == "tcp" else _open_pty(frame, folder)

    def end(self, *_: int | FrameType | None) -> None:
        self._ended = True

    def run(self) -> int:
        """Rows written when it ends; the last one is whole."""
        begun_s, written, rows = time.monotonic(), 0, 0
        while not (self._ended and written == self._turn.place(rows)):
            if not self._ended:
                due_rows = int((time.monotonic() - begun_s) * self._rate_hz)
                late_rows = due_rows - rows - max(self._rate_hz * CATCH_UP_S, 2.0)
                if late_rows > 0:  # nobody read for a while: this instrument waits, and loses nothing
                    begun_s += late_rows / self._rate_hz
                    due_rows -= int(late_rows)
                rows = due_rows if written == self._turn.place(rows) else rows
            due = self._turn.place(rows)
            while written < due and (taken := self._write(written, due)):
                written += taken
            time.sleep(BATCH_S)
        return rows

    def _write(self, written: int, due: int) -> int:
        """Bytes taken by the port; 0 when it is full."""
        turn = self._turn.bytes
        at = written % len(turn)
        try:
            return os.write(self._fd, turn[at : min(at + due - written, len(turn))])
        except BlockingIOError:
            select.select([], [self._fd], [], BATCH_S)
            return 0


def _open_pty(frame: FrameCard, folder: Path) -> int:
    master, slave = pty.openpty()
    tty.setraw(slave)  # stays open here, so that the reader may come later
    os.set_blocking(master, False)
    (folder / str(frame.links[0].port)).symlink_to(os.ttyname(slave))
    _say({"ready": True})
    return master


def _open_tcp(frame: FrameCard) -> int:
    link = frame.links[0]
    with socket.create_server((link.host or "", link.tcp_port or 0)) as server:
        _say({"ready": True})
        server.settimeout(30.0)
        client, _ = server.accept()
    client.setblocking(False)
    client.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    return client.detach()


def _say(words: dict[str, object]) -> None:
    sys.stdout.write(json.dumps(words) + "\n")
    sys.stdout.flush()


def main(card: str, folder: str) -> int:
    feeder = Feeder(load_frame(Path(card)), Path(folder))
    signal.signal(signal.SIGTERM, feeder.end)
    _say({"rows": feeder.run()})
    return 0


if __name__ == "__main__":
    raise SystemExit(main(*sys.argv[1:]))
