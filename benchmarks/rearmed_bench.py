"""The real bench process, armed again after every STOP, so that one run gives thousands of limit trips.

    python -m benchmarks.rearmed_bench bench CONFIG WORDS      (what the supervisor calls)

A tripped bench latches, as it must. Here the real BenchProcess with the real core, decoders and pipeline runs
unchanged up to the moment at which the STOP has been written and recorded; then the pipeline is replaced by a copy that
was made in LOADING, while nothing else was to be done. So the measured path is the product's own. Two thin wrappers
around the link note the time from the read of the deciding bytes to the end of the write of the STOP: the in-process
part, written as JSON to $MIDSPAN_BENCH_INSIDE at the end, with the most time that a copy took.
"""

from __future__ import annotations

import copy
import json
import os
import sys
import time
from array import array
from collections import deque
from pathlib import Path
from typing import Any

from daq.bench import loop
from daq.bench.core import BenchCore
from daq.watch.pipeline import Pipeline
from daq.watch.values import State
from drivers.links import Link

STOP = b"S\r\n"
TURNS_BEFORE_COPY = 3  # reads after a STOP until the copy for the next one is made
BASE_NS = 1_000_000_000
STALE_NS = 200_000_000  # before the first event; between events, some 10 ms apart, a copy never gets this old


class TimedLink:
    """The real link, with the two instants that matter."""

    def __init__(self, link: Link, spans_ns: array[int]) -> None:
        self._link = link
        self._read, self._write = link.read, link.write
        self._spans_ns = spans_ns
        self._begun_ns = 0
        self.stopped = False

    def read(self, max_bytes: int = 65_536) -> bytes | None:
        self._begun_ns = time.monotonic_ns()
        return self._read(max_bytes)

    def write(self, data: bytes) -> int:
        taken = self._write(data)
        if data == STOP:
            self._spans_ns.append(time.monotonic_ns() - self._begun_ns)
            self.stopped = True
        return taken

    def __getattr__(self, name: str) -> object:
        return getattr(self._link, name)


class RearmedBench(loop.BenchProcess):
    """BenchProcess with a spare pipeline."""

    def __init__(self, config: loop.BenchConfig) -> None:
        super().__init__(config)
        self._spans_ns = array("q")
        self._copy_ns = array("q")
        self._timed = TimedLink(self._ports[0].link, self._spans_ns)
        self._ports[0].link = self._timed  # type: ignore[assignment]
        self._spare: Pipeline | None = None
        self._base: Pipeline | None = None  # for a STOP that comes before there is a spare again
        self._based_ns = 0
        self._seconds = 0
        self._turns = 0
        self._copied_ns = 0

    def _on_link(self, number: int, mask: int) -> None:
        super()._on_link(number, mask)
        core: BenchCore = self._core
        if self._timed.stopped:
            self._timed.stopped = False
            self._rearm(core)
        elif core.pipeline.state is State.LOADING:
            self._turns += 1
            due_ns = self._copied_ns + STALE_NS
            if (self._spare is None and self._turns >= TURNS_BEFORE_COPY) or time.monotonic_ns() > due_ns:
                self._make_spare(core)

    def _rearm(self, core: BenchCore) -> None:
        if self._base is None:
            return  # the touch of the approach
        self._seconds += self._spare is None
        core.pipeline, self._spare = self._spare or twin(self._base), None
        self._turns = 0

    def _make_spare(self, core: BenchCore) -> None:
        begun_ns = time.monotonic_ns()
        self._spare = twin(core.pipeline)
        if self._base is None or begun_ns > self._based_ns + BASE_NS:
            self._base, self._based_ns = twin(core.pipeline), begun_ns
        self._copied_ns = time.monotonic_ns()
        self._copy_ns.append(self._copied_ns - begun_ns)

    def _goodbye(self, *, resting: bool) -> None:
        super()._goodbye(resting=resting)
        target = os.environ.get("MIDSPAN_BENCH_INSIDE")
        if target:
            told = {
                "inside_us": [span / 1e3 for span in self._spans_ns],
                "copy_us_max": max(self._copy_ns, default=0) / 1e3,
                "stops_without_spare": self._seconds,
            }
            Path(target).write_text(json.dumps(told), encoding="ascii")


def twin(pipeline: Pipeline) -> Pipeline:
    """A copy that shares what never changes: cards, plans, and the numbers in the histories."""
    core = pipeline._core
    frozen = [pipeline.setup, pipeline.setup.frame, pipeline._force, core.proven, core.watch.settings]
    if core.run is not None:
        frozen.append(core.run.plan)
    if core.at_once is not None:
        frozen.append(core.at_once.__self__)  # the bench core is told of stops
    memo: dict[int, Any] = {id(each): each for each in frozen}
    for owner in (core.watch.level, core.travel, core.runaway):
        for name in getattr(owner, "__slots__", ()):
            held = getattr(owner, name)
            if isinstance(held, deque):  # of floats, or of tuples of floats
                memo[id(held)] = held.copy()
    return copy.deepcopy(pipeline, memo)


def main(config_path: str, words: str) -> int:
    with open(config_path, encoding="utf-8") as file:
        config = loop.BenchConfig(**json.load(file), **json.loads(words))
    return RearmedBench(config).run()


if __name__ == "__main__":
    sys.exit(main(sys.argv[2], sys.argv[3]))
