"""The instrument side of a pseudo-terminal, as its own process: instrument.c where there is a compiler, else this.

    python -m benchmarks.instrument STREAMS RATE_HZ STIFFNESS_N_MM GAP_MM ZERO_N NOISE_N OVER_N SPACING_S ANSWERS

What it does and says is written at the top of instrument.c. `Instrument` starts either and talks to it.
"""

from __future__ import annotations

import os
import pty
import random
import select
import subprocess
import sys
import time
import tty
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path

from benchmarks.harness import NS, compiled, python_of
from benchmarks.lane import GAP_MM, NOISE_N, OVER_N, ZERO_N, Lane, row_bytes
from daq.bench.schedule import hurry, quiet_collector

ANSWER_NS = NS
WARM_NS = 2_000_000
FIFO_PRIORITY = 30


@dataclass(frozen=True, slots=True)
class Answers:
    """What the instrument saw, by stream. latencies in us; stops: monotonic ns of STOPs that no event asked for."""

    latency_us: dict[int, list[float]]
    missed: dict[int, int]
    stops: dict[int, list[int]]


class Instrument:
    """A started instrument process."""

    def __init__(self, process: subprocess.Popen[str], answers: Path, streams: int) -> None:
        self.process = process
        self._answers = answers
        assert process.stdout is not None
        self.devices = [process.stdout.readline().strip() for _ in range(streams)]

    def begin(self, events: int) -> None:
        """Let so many events happen on each stream."""
        assert self.process.stdin is not None
        self.process.stdin.write(f"go {events}\n")
        self.process.stdin.flush()

    def done(self, wait_s: float) -> bool:
        """Whether all of them are answered or missed."""
        assert self.process.stdout is not None
        if self.process.poll() is not None:
            raise RuntimeError("the instrument has ended")
        if not select.select([self.process.stdout], [], [], wait_s)[0]:
            return False
        return self.process.stdout.readline().strip() == "done"

    def end(self) -> Answers:
        """End it and read what it wrote."""
        assert self.process.stdin is not None
        self.process.stdin.close()
        self.process.wait(10)
        found = Answers({}, {}, {})
        for line in self._answers.read_text("ascii").splitlines():
            kind, stream, value = line.split()
            number = int(stream)
            if kind == "E":
                found.latency_us.setdefault(number, []).append(int(value) / 1e3)
            elif kind == "M":
                found.missed[number] = found.missed.get(number, 0) + 1
            else:
                found.stops.setdefault(number, []).append(int(value))
        return found


@contextmanager
def instrument(
    folder: Path, rate_hz: float, stiffness_n_mm: float, *, streams: int = 1, spacing_s: float = 0.01
) -> Iterator[Instrument]:
    """The program in C, else in Python; killed if it is still there at the end."""
    program = compiled("instrument", folder)
    command = [str(program)] if program is not None else python_of("benchmarks.instrument")
    answers = folder / f"answers-{time.monotonic_ns()}"
    words = [streams, rate_hz, stiffness_n_mm, GAP_MM, ZERO_N, NOISE_N, OVER_N, spacing_s, answers]
    process = subprocess.Popen(
        [*command, *map(str, words)], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    )
    try:
        yield Instrument(process, answers, streams)
    finally:
        if process.poll() is None:
            process.kill()
            process.wait()


# --- the program


@dataclass(slots=True)
class Stream:
    """One pty and the events on it."""

    master: int
    slave: int
    due_ns: int = 0
    counter: int = 0
    event_ns: int = 0
    asked_ns: int = 0
    over_left: int = 0
    asked: int = 0
    log: list[str] = field(default_factory=list)


class Program:
    """The same as instrument.c, in Python."""

    def __init__(self, words: list[str]) -> None:
        numbers = [float(word) for word in words[:8]]
        self._period_ns = int(NS / numbers[1])
        self._over_n, self._spacing_s = numbers[6], numbers[7]
        self._lane = Lane(numbers[1], numbers[2])
        self._dice = random.Random(2)
        self._events = 0
        self._answers = Path(words[8])
        self._streams = [Stream(*pty.openpty()) for _ in range(int(numbers[0]))]
        for stream in self._streams:
            tty.setraw(stream.slave)
            os.set_blocking(stream.master, False)
            sys.stdout.write(os.ttyname(stream.slave) + "\n")
        sys.stdout.flush()

    def run(self) -> None:
        poll = select.poll()
        places = {stream.master: number for number, stream in enumerate(self._streams)}
        for descriptor in (*places, 0):
            poll.register(descriptor, select.POLLIN)
        begin_ns = time.monotonic_ns()
        for number, stream in enumerate(self._streams):
            stream.due_ns = begin_ns + number * self._period_ns // len(self._streams)
        while True:
            due = min(self._streams, key=lambda each: each.due_ns)
            wait_ns = due.due_ns - time.monotonic_ns()
            for descriptor, _ in poll.poll(max(0, wait_ns) // 1_000_000):
                if descriptor == 0 and not self._told():
                    return
                if descriptor != 0:
                    self._hear(places[descriptor])
            left_ns = due.due_ns - time.monotonic_ns()
            if left_ns > 1_000_000:
                continue
            if left_ns > 0 and self._heard_within(left_ns, places):
                continue
            self._row(due)

    def _heard_within(self, left_ns: int, places: dict[int, int]) -> bool:
        """poll waits in milliseconds; select waits the rest."""
        ready, _, _ = select.select(list(places), [], [], left_ns / NS)
        for descriptor in ready:
            self._hear(places[descriptor])
        return bool(ready)

    def _told(self) -> bool:
        word = os.read(0, 64)
        if word.startswith(b"go "):
            self._events, self._lane.deaf = int(word[3:]), True
            for number, stream in enumerate(self._streams):
                share = 1.0 + number / len(self._streams)
                stream.asked, stream.event_ns = 0, time.monotonic_ns() + int(self._spacing_s * share * NS)
        return bool(word)

    def _hear(self, number: int) -> None:
        stream = self._streams[number]
        data = os.read(stream.master, 512)
        at_ns = time.monotonic_ns()
        if number == 0:
            replies, stops = self._lane.hear(data)
            for reply in replies:
                os.write(stream.master, reply)
        else:
            stops = data.count(b"S")
        for _ in range(stops):
            if stream.asked_ns:
                stream.log.append(f"E {number} {at_ns - stream.asked_ns}")
                stream.asked_ns = 0
            else:
                stream.log.append(f"S {number} {at_ns}")

    def _row(self, stream: Stream) -> None:
        early = not stream.asked_ns and stream.due_ns < stream.event_ns - WARM_NS
        idle = (early or not self._events) and self._spacing_s > 0.0
        if idle and stream is not self._streams[0]:
            stream.due_ns += self._period_ns
            return
        force_n, at_mm = self._lane.row() if stream is self._streams[0] else self._lane.row_again()
        wanted = stream.asked < self._events and not stream.asked_ns and not stream.over_left
        if wanted and stream.due_ns >= stream.event_ns:
            stream.over_left = 2
        deciding = stream.over_left == 1
        if stream.over_left:
            force_n, stream.over_left = self._over_n, stream.over_left - 1
        data = row_bytes(stream.counter, force_n, at_mm)
        stream.counter += 1
        if deciding:
            stream.asked += 1
            stream.event_ns = stream.due_ns + int(self._spacing_s * self._dice.uniform(0.8, 1.2) * NS)
            stream.asked_ns = time.monotonic_ns()
        try:
            os.write(stream.master, data)
        except BlockingIOError:
            pass  # nobody reads: a machine goes on regardless
        stream.due_ns += self._period_ns
        if stream is self._streams[0]:
            self._look(time.monotonic_ns())

    def _look(self, now_ns: int) -> None:
        for number, stream in enumerate(self._streams):
            if stream.asked_ns and now_ns - stream.asked_ns > ANSWER_NS:
                stream.log.append(f"M {number} 0")
                stream.asked_ns = 0
        done = self._events and all(s.asked >= self._events and not s.asked_ns for s in self._streams)
        if done:
            self._events, self._lane.deaf = 0, False
        if done or self._streams[0].counter % 512 == 0:
            self._flush()
        if done:
            sys.stdout.write("done\n")
            sys.stdout.flush()

    def _flush(self) -> None:
        with self._answers.open("a", encoding="ascii") as file:
            for stream in self._streams:
                file.writelines(line + "\n" for line in stream.log)
                stream.log.clear()


def main(words: list[str]) -> None:
    program = Program(words)
    if hurry().fifo:
        os.sched_setscheduler(0, os.SCHED_FIFO, os.sched_param(FIFO_PRIORITY))
    quiet_collector()
    try:
        program.run()
    finally:
        program._flush()


if __name__ == "__main__":
    main(sys.argv[1:])
