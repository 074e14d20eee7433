"""A person at a terminal for tests: a command of midspan on a pseudo-terminal of 80 x 24, typed to and read from."""

from __future__ import annotations

import fcntl
import os
import pty
import re
import select
import struct
import subprocess
import sys
import termios
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path

ANSI = re.compile(r"\x1b\[[0-9;?]*[A-Za-z]")
ROWS, COLUMNS = 24, 80


class Typed:
    """One command. `seen` is everything it has written, without colours and cursor movements."""

    def __init__(self, words: Sequence[str], folder: Path) -> None:
        self._ours, theirs = pty.openpty()
        fcntl.ioctl(theirs, termios.TIOCSWINSZ, struct.pack("HHHH", ROWS, COLUMNS, 0, 0))
        command = [sys.executable, "-m", "daq.cli.entry", *words]
        self.process = subprocess.Popen(
            command, cwd=folder, stdin=theirs, stdout=theirs, stderr=theirs, start_new_session=True
        )
        os.close(theirs)
        self.seen = ""

    def type(self, text: str) -> None:
        """As one piece: more than one character is a burst."""
        os.write(self._ours, text.encode())

    def wait(self, pattern: str, timeout_s: float = 30.0) -> re.Match[str]:
        """Until the pattern appears in what came since the last wait."""
        return self._until(pattern, time.monotonic() + timeout_s)

    def _until(self, pattern: str, until_s: float) -> re.Match[str]:
        while True:
            found = re.search(pattern, self.seen)
            if found:
                self.seen = self.seen[found.end() :]
                return found
            assert self._read(0.1) or time.monotonic() < until_s, f"not seen: {pattern}\n{self.seen[-3000:]}"

    def never(self, pattern: str, seconds: float) -> None:
        """The pattern does not appear although the view goes on being drawn."""
        until_s = time.monotonic() + seconds
        while time.monotonic() < until_s:
            self._read(0.1)
            assert not re.search(pattern, self.seen), self.seen[-3000:]

    def _read(self, timeout_s: float) -> bool:
        if not select.select([self._ours], [], [], timeout_s)[0]:
            return False
        try:
            data = os.read(self._ours, 65536)
        except OSError:
            return False  # the command has ended
        self.seen += ANSI.sub("", data.decode("utf-8", "replace")).replace("\r", "")
        return bool(data)

    def end(self) -> int:
        """What is left to read, and the exit code."""
        until_s = time.monotonic() + 15.0
        while self.process.poll() is None and time.monotonic() < until_s:
            self._read(0.1)
        while self._read(0.0):
            pass
        return self.process.wait(5)

    def hang_up(self) -> None:
        """The window is closed."""
        os.close(self._ours)
        self._ours = -1

    def close(self) -> None:
        if self.process.poll() is None:
            self.process.kill()
            self.process.wait(5)
        if self._ours >= 0:
            os.close(self._ours)


@contextmanager
def typed(*words: str, folder: Path) -> Iterator[Typed]:
    command = Typed(words, folder)
    try:
        yield command
    finally:
        command.close()
