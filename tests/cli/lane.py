"""A lane for tests: `midspan simulate` and `midspan serve` as a user starts them, on a card that a test may change."""

from __future__ import annotations

import json
import shutil
import socket
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from daq.cards.load import example_path

READY_S = 40.0


@dataclass
class Lane:
    """A folder with a card, a virtual frame that plays it, and whatever serves it."""

    folder: Path
    card: Path
    data: Path

    def serve(self, *options: str) -> subprocess.Popen[str]:
        """Start the daemon; returns at once."""
        words = ["serve", str(self.card), "--data", str(self.data), *options]
        command = [sys.executable, "-m", "daq.cli.entry", *words]
        return subprocess.Popen(
            command, cwd=self.folder, stderr=subprocess.PIPE, text=True, start_new_session=True
        )

    @contextmanager
    def served(self) -> Iterator[subprocess.Popen[str]]:
        daemon = self.serve()
        try:
            assert daemon.stderr is not None
            said = ""
            while ": ready; records go to" not in said:
                line = daemon.stderr.readline()
                assert line, said
                said += line
            yield daemon
        finally:
            daemon.terminate()
            daemon.communicate(timeout=60)

    def call(self, *words: str, said: str = "") -> subprocess.CompletedProcess[str]:
        """Any other command, to its end."""
        command = [sys.executable, "-m", "daq.cli.entry", *words]
        return subprocess.run(
            command, cwd=self.folder, input=said, capture_output=True, text=True, check=False, timeout=90
        )

    def hands(self, **words: Any) -> dict[str, Any]:
        """The simulated person does something."""
        own = self.folder / f"own-{time.monotonic_ns()}"
        with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as line:
            line.bind(str(own))
            line.settimeout(5.0)
            line.sendto(json.dumps(words).encode(), str(self.folder / "hands"))
            answer: dict[str, Any] = json.loads(line.recv(65536))
        own.unlink()
        assert "refused" not in answer, answer
        return answer


@contextmanager
def lane_of(
    card: str, data: Path, *, bars: str = "alumina", changes: dict[str, str] | None = None
) -> Iterator[Lane]:
    """changes: texts of the shipped card and what stands there instead."""
    with ExitStack() as stack:
        folder = Path(tempfile.mkdtemp(prefix="msc-", dir="/dev/shm"))
        stack.callback(shutil.rmtree, folder, ignore_errors=True)
        stack.enter_context(pytest.MonkeyPatch.context()).setenv("MIDSPAN_RUNTIME", str(folder))
        text = example_path(card).read_text("utf-8")
        for before, after in (changes or {}).items():
            assert before in text
            text = text.replace(before, after)
        path = folder / card
        path.write_text(text, encoding="utf-8")
        stack.enter_context(simulated(path, bars, folder))
        yield Lane(folder, path, data)


@contextmanager
def simulated(card: Path, bars: str, folder: Path) -> Iterator[None]:
    words = ["simulate", str(card), "--bars", bars, "--hands", "hands", "--truth", "truth.jsonl"]
    command = [sys.executable, "-m", "daq.cli.entry", *words]
    process = subprocess.Popen(command, cwd=folder, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    try:
        until_s = time.monotonic() + READY_S
        while not (folder / "hands").exists():
            assert process.poll() is None and time.monotonic() < until_s, "the virtual frame did not start"
            time.sleep(0.02)
        yield
    finally:
        process.terminate()
        process.wait(10)
