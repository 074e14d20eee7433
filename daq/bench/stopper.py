"""The stopper: a process of its own that writes STOP when the bench process dies or freezes. Shares no code with it.

Its only inputs are one socket from the bench (descriptors of the machine's links, heartbeats, "stop", end of file)
and a deadline. It knows no limits, files or people. It is not a safety function: the hard-wired stop is.
"""

from __future__ import annotations

import array
import fcntl
import json
import os
import select
import socket
import struct
import sys
import termios
import time

REPEATS = 20  # STOP at 10 Hz for 2 s: a line that lost one gets another
REPEAT_S = 0.1
DESCRIPTORS_MAX = 8


class Stopper:
    """Serves one bench process until it says goodbye, dies or freezes."""

    def __init__(self, bench: socket.socket) -> None:
        self._bench = bench
        self._links: list[int] = []
        self._stop = b""
        self._deadline_s = 3600.0  # until the bench has said what its deadline is
        self._told = False

    def serve(self) -> int:
        """Returns the exit code: 0 after a goodbye, 3 when it had to act on a dead bench."""
        poll = select.poll()
        poll.register(self._bench, select.POLLIN)
        while True:
            word = self._hear() if poll.poll(self._deadline_s * 1000.0) else b"late"
            if word == b"bye":
                return 0
            if word in (b"", b"stop", b"late"):
                self._write_stop()
            if word == b"":
                self._drop_dtr()
                self._repeat()
                return 3
            if word == b"late":
                self._tell()
            elif word == b".":
                self._told = False

    def _hear(self) -> bytes:
        try:
            word, ancillary, _, _ = self._bench.recvmsg(4096, socket.CMSG_SPACE(4 * DESCRIPTORS_MAX))
        except OSError:
            return b""
        if word[:1] == b"{":
            self._take_order(json.loads(word), ancillary)
        return word

    def _take_order(self, order: dict[str, object], ancillary: list[tuple[int, int, bytes]]) -> None:
        for link in self._links:
            os.close(link)
        links = array.array("i")
        for _, _, data in ancillary:
            links.frombytes(data[: len(data) - len(data) % links.itemsize])
        self._links = list(links)
        self._stop = bytes.fromhex(str(order["stop"]))
        self._deadline_s = float(str(order["deadline_s"]))

    def _write_stop(self) -> None:
        """Never blocks for more than 50 ms a link; a full output is thrown away, as STOP outweighs what waits."""
        for link in self._links:
            for _ in range(50):
                try:
                    os.write(link, self._stop)
                    break
                except BlockingIOError:
                    flush_output(link)
                    time.sleep(0.001)
                except OSError:
                    break

    def _drop_dtr(self) -> None:
        """A relay on DTR is a second path to standstill; our descriptor would otherwise keep the line up."""
        for link in self._links:
            try:
                fcntl.ioctl(link, termios.TIOCMBIC, struct.pack("I", termios.TIOCM_DTR))
            except OSError:
                continue  # a pty or a socket has no modem lines

    def _repeat(self) -> None:
        for _ in range(REPEATS):
            time.sleep(REPEAT_S)
            self._write_stop()

    def _tell(self) -> None:
        if not self._told:
            self._told = True
            try:
                self._bench.send(b"late", socket.MSG_DONTWAIT)
            except OSError:
                return  # a frozen bench cannot listen; end of file will say more


def flush_output(link: int) -> None:
    try:
        termios.tcflush(link, termios.TCOFLUSH)
    except (OSError, termios.error):
        return  # not a terminal


def hurry() -> None:
    """Real-time priority above the bench where permitted; without it the stopper still works, only later."""
    try:
        os.sched_setscheduler(0, os.SCHED_FIFO, os.sched_param(20))
    except OSError:
        return


if __name__ == "__main__":
    hurry()
    sys.exit(Stopper(socket.socket(fileno=int(sys.argv[1]))).serve())
