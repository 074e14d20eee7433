"""Numbering: decoded rows -> Blocks with running index, gaps and times, and the status inputs in them. Pure.

Shared by all dialects. Rows that simply count on are taken in runs; whatever is unusual is judged row by row.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from daq.stream.block import GAP_UNKNOWN, Block, Floats
from daq.stream.clock import ClockModel
from drivers.counter import WHOLE_MAX, Counter
from drivers.decoded import NO_REJECTS, InputSample, Reason
from drivers.plan import RowPlan
from drivers.timing import CounterTiming, Timing

SCALAR_ROWS = 32
"""Up to this many rows plain Python compares faster than numpy."""

SLOW_ROWS = 64
"""Rows judged one by one before a run is tried again."""


@dataclass(frozen=True, slots=True)
class Numbered:
    blocks: tuple[Block, ...]
    inputs: tuple[InputSample, ...]
    rejected: Mapping[str, int]


@dataclass(slots=True)
class _Segment:
    """Consecutive samples of one feed and what is missing before them. parts: ranges of rows; changes:
    (offset, rule number, active)."""

    first_index: int
    gap: int
    parts: list[tuple[int, int]] = field(default_factory=list)
    count: int = 0
    changes: list[tuple[int, int, bool]] = field(default_factory=list)

    def add(self, start: int, stop: int) -> None:
        self.count += stop - start
        if self.parts and self.parts[-1][1] == start:
            start = self.parts.pop()[0]
        self.parts.append((start, stop))

    def rows_of(self, values: Floats) -> Floats:
        if len(self.parts) == 1:
            return values[slice(*self.parts[0])]
        return np.concatenate([values[start:stop] for start, stop in self.parts])


class Numbering:
    """Carried state of one link since its port was opened."""

    def __init__(self, plan: RowPlan, timing: Timing, *, source: int, rate_hz: float) -> None:
        self._plan = plan
        self._timing = timing
        self._source = source
        self._counter = None if plan.counter is None else Counter(plan.modulus, rate_hz)
        self._next_index = 0
        self._places = tuple(dict.fromkeys(rule.position for rule in plan.inputs))
        self._status = [np.nan] * len(self._places)
        self._active: list[bool | None] = [None] * len(plan.inputs)
        self._ticks = (0.0, 0.0)  # last raw device time, turns added so far
        self._lost = False  # without a counter: something was thrown away since the last accepted row
        self._segments: list[_Segment] = []
        self._rejected: dict[str, int] = {}

    @property
    def clock(self) -> ClockModel | None:
        """Drift and jitter of the device's counter, where it has one."""
        return self._timing.clock if isinstance(self._timing, CounterTiming) else None

    def number(self, values: Floats, breaks: Sequence[int], arrival_s: float) -> Numbered:
        """values: (n, w) rows; breaks: rows before which something was thrown away, 0 <= row < n."""
        at = self._take_run(values, 0, breaks)
        if at and at == len(values):
            block = self._block(values, self._next_index, 0, arrival_s)
            self._next_index += at
            return Numbered((block,), (), NO_REJECTS)
        self._segments, self._rejected = [], {}
        if at:
            self._extend(0, at, 0)
        while at < len(values):
            stop = min(at + SLOW_ROWS, len(values))
            self._judge_rows(values, at, stop, breaks)
            run = self._take_run(values, stop, breaks)
            if run:
                self._extend(stop, stop + run, 0)
            at = stop + run
        blocks, inputs = [], []
        for segment in self._segments:
            rows = segment.rows_of(values)
            block = self._block(rows, segment.first_index, segment.gap, arrival_s)
            blocks.append(block)
            for offset, rule, active in segment.changes:
                inputs.append(InputSample(self._plan.inputs[rule].name, active, float(block.time_s[offset])))
        return Numbered(tuple(blocks), tuple(inputs), self._rejected or NO_REJECTS)

    def follows(self, row: tuple[float, ...], ahead: int) -> bool:
        """After `ahead` more rows that simply count on, this one would too. Changes nothing."""
        plan = self._plan
        if plan.time is not None or self._lost or not self._unmoved(row):
            return False
        return self._counter is None or self._counter.follows(row[plan.counter or 0], ahead)

    def _unmoved(self, row: tuple[float, ...]) -> bool:
        """No status input moves in this row."""
        return not self._places or all(
            row[at] == held for held, at in zip(self._status, self._places, strict=True)
        )

    def one(self, row: tuple[float, ...], arrival_s: float) -> Block | None:
        """The block of a single row that simply counts on; None: use `number`, nothing has changed."""
        plan = self._plan
        if plan.time is not None or self._lost:
            return None
        if not self._unmoved(row):
            return None
        if self._counter is not None and not self._counter.counts_on(row[plan.counter or 0]):
            return None
        index = self._next_index
        self._next_index = index + 1
        time_s = self._timing.feed(index, None, 1, arrival_s)
        return Block(self._source, index, time_s, np.array((row[: plan.channels],), dtype=np.float64))

    def plain_reads(
        self, values: Floats, rows: Sequence[int], last_arrivals_s: Sequence[float]
    ) -> Block | None:
        """Rows of several reads that simply count on, as one block with the times they have read by read. rows: how
        many each read completed; last_arrivals_s: of the last row of each. None: feed them one by one, nothing has
        changed."""
        plan = self._plan
        if plan.time is not None or self._lost or not len(values):
            return None
        for held, place in zip(self._status, self._places, strict=True):
            if not (values[:, place] == held).all():
                return None
        if self._counter is not None and not self._counter.takes_all(values[:, plan.counter]):
            return None
        first = index = self._next_index
        feed, times = self._timing.feed, []
        for count, arrival_s in zip(rows, last_arrivals_s, strict=True):
            if count:
                times.append(feed(index, None, count, arrival_s))
                index += count
        self._next_index = index
        return Block(self._source, first, np.concatenate(times), values[:, : plan.channels])

    # -- the usual case: rows that count on, no status input moved

    def _take_run(self, values: Floats, at: int, breaks: Sequence[int]) -> int:
        """How many rows from `at` on are of the usual kind: these are counted."""
        plan = self._plan
        stop = len(values)
        if self._counter is None:
            if self._lost or at in breaks:
                return 0
            stop = min((row for row in breaks if row > at), default=stop)
        if stop - at <= SCALAR_ROWS:
            return self._take_few(values[at:stop].tolist())
        for held, place in zip(self._status, self._places, strict=True):
            stop = at + _while_true(values[at:stop, place] == held)
        if plan.time is not None:
            stop = at + _while_true(np.abs(values[at:stop, plan.time]) < WHOLE_MAX)
        if self._counter is None or stop == at:
            return stop - at
        return self._counter.take_run(values[at:stop, plan.counter])

    def _take_few(self, rows: list[list[float]]) -> int:
        """The same in plain Python, for a few rows."""
        plan, counter = self._plan, self._counter
        for taken, row in enumerate(rows):
            for held, place in zip(self._status, self._places, strict=True):
                if row[place] != held:
                    return taken
            if plan.time is not None and not abs(row[plan.time]) < WHOLE_MAX:
                return taken
            if counter is not None and not counter.counts_on(row[plan.counter or 0]):
                return taken
        return len(rows)

    # -- everything else, row by row

    def _judge_rows(self, values: Floats, start: int, stop: int, breaks: Sequence[int]) -> None:
        for row, numbers in enumerate(values[start:stop].tolist(), start):
            if self._counter is None and row in breaks:
                self._lost = True
            verdict = self._verdict(numbers)
            if isinstance(verdict, Reason):
                self._rejected[verdict] = self._rejected.get(verdict, 0) + 1
                self._lost = self._counter is None
            else:
                self._lost = False
                self._note_inputs(numbers, self._extend(row, row + 1, verdict))

    def _verdict(self, numbers: list[float]) -> int | Reason:
        """Samples missing before this row, or why it is rejected."""
        plan = self._plan
        for rule in plan.inputs:
            value = numbers[rule.position]
            if not abs(value) < WHOLE_MAX or (rule.bit is not None and value != int(value)):
                return Reason.STATUS
        if plan.time is not None and not abs(numbers[plan.time]) < WHOLE_MAX:
            return Reason.TIME
        if self._counter is not None:
            return self._counter.judge(numbers[plan.counter or 0])
        return GAP_UNKNOWN if self._lost and self._next_index > 0 else 0

    def _extend(self, start: int, stop: int, gap: int) -> _Segment:
        if gap or not self._segments:
            self._next_index += max(gap, 0)
            self._segments.append(_Segment(self._next_index, gap))
        segment = self._segments[-1]
        segment.add(start, stop)
        self._next_index += stop - start
        return segment

    def _note_inputs(self, numbers: list[float], segment: _Segment) -> None:
        """Changes of the status inputs in the row that was added last."""
        status = [numbers[place] for place in self._places]
        if status == self._status:
            return
        self._status = status
        for number, rule in enumerate(self._plan.inputs):
            active = rule.active(numbers[rule.position])
            if active is not self._active[number]:
                self._active[number] = active
                segment.changes.append((segment.count - 1, number, active))

    # -- blocks

    def _block(self, rows: Floats, first_index: int, gap: int, arrival_s: float) -> Block:
        plan = self._plan
        if gap == GAP_UNKNOWN:
            self._timing.restart()
        device_s = None if plan.time is None else self._device_s(rows[:, plan.time])
        time_s = self._timing.feed(first_index, device_s, len(rows), arrival_s)
        counts = rows if rows.shape[1] == plan.channels else rows[:, : plan.channels]
        return Block(self._source, first_index, time_s, counts, gap)

    def _device_s(self, ticks: Floats) -> Floats:
        modulus = self._plan.time_modulus
        if modulus is not None:
            last, turns = self._ticks
            steps = np.diff(ticks, prepend=last)
            unwrapped = ticks + turns + modulus * np.cumsum(steps < -modulus / 2)
            self._ticks = (float(ticks[-1]), float(unwrapped[-1] - ticks[-1]))
            ticks = unwrapped
        return ticks * self._plan.time_unit_s


def _while_true(good: np.ndarray[tuple[int], np.dtype[np.bool_]]) -> int:
    """How many are true from the first on."""
    if not len(good):
        return 0
    first_false = int(good.argmin())
    return len(good) if first_false == 0 and good[0] else first_false
