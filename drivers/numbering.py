"""Numbering: decoded rows -> Blocks with running index, gaps and times. Duplicates and wild counters are
rejected.

Pure; shared by all dialects. A counter that goes back or leaps further than LEAP_S of samples is not
believed until
RESTART_ROWS rows in a row count on from there: one damaged counter must not hide a million samples.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from daq.stream.block import GAP_UNKNOWN, Block, Floats
from drivers.decoded import NO_REJECTS, SCALAR_ROWS, InputSample, Reason
from drivers.plan import RowPlan
from drivers.timing import Timing

LEAP_S = 10.0
RESTART_ROWS = 4
COUNTER_MAX = 2.0**53
"""Whole numbers are exact in a float up to here."""


@dataclass(frozen=True, slots=True)
class Numbered:
    blocks: tuple[Block, ...]
    inputs: tuple[InputSample, ...]
    rejected: Mapping[str, int]


NOTHING = Numbered((), (), NO_REJECTS)


@dataclass(slots=True)
class _Segment:
    """Consecutive rows of one feed and what is missing before them; changes: (offset, rule number,
    active)."""

    first_index: int
    gap: int
    rows: list[int]
    changes: list[tuple[int, int, bool]]


class Numbering:
    """Carried state of one link since its port was opened."""

    def __init__(self, plan: RowPlan, timing: Timing, *, source: int, rate_hz: float) -> None:
        self._plan = plan
        self._timing = timing
        self._source = source
        self._leap_rows = max(int(LEAP_S * rate_hz), 2)
        if plan.modulus is not None:
            self._leap_rows = min(self._leap_rows, max((plan.modulus - 1) // 2, 1))
        self._next_index = 0
        self._counter: int | None = None
        self._suspect: int | None = None
        self._suspect_rows = 0
        self._status = [np.nan] * len(plan.inputs)
        self._active: list[bool | None] = [None] * len(plan.inputs)
        self._ticks = (0.0, 0.0)  # last raw device time, turns added so far
        self._lost = False  # something was thrown away since the last accepted row

    def number(self, values: Floats, breaks: Sequence[int], arrival_s: float) -> Numbered:
        """values: (n, w) rows; breaks: rows before which something was thrown away, 0 <= row < n."""
        if not len(values):
            return NOTHING
        if self._plain(values, breaks):
            block = self._block(values, self._next_index, 0, arrival_s)
            self._next_index += len(values)
            return Numbered((block,), (), NO_REJECTS)
        segments, rejected = self._one_by_one(values, breaks)
        blocks: list[Block] = []
        inputs: list[InputSample] = []
        for segment in segments:
            block = self._block(values[segment.rows], segment.first_index, segment.gap, arrival_s)
            blocks.append(block)
            for offset, rule, active in segment.changes:
                inputs.append(InputSample(self._plan.inputs[rule].name, active, float(block.time_s[offset])))
        return Numbered(tuple(blocks), tuple(inputs), rejected)

    def one(self, row: tuple[float, ...], arrival_s: float) -> Block | None:
        """The block of a single row that simply counts on; None: use `number`, nothing has changed."""
        plan = self._plan
        if plan.time is not None or self._lost:
            return None
        for held, rule in zip(self._status, plan.inputs, strict=True):
            if row[rule.position] != held:
                return None
        if plan.counter is not None:
            if self._counter is None or self._suspect is not None:
                return None
            counter = self._counter + 1
            if counter == plan.modulus:
                counter = 0
            if row[plan.counter] != counter or counter >= COUNTER_MAX:
                return None
            self._counter = counter
        index = self._next_index
        self._next_index = index + 1
        time_s = self._timing.feed(index, None, 1, arrival_s)
        return Block(self._source, index, time_s, np.array((row[: plan.channels],), dtype=np.float64))

    def _block(self, rows: Floats, first_index: int, gap: int, arrival_s: float) -> Block:
        plan = self._plan
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

    # -- the usual case, decided quickly: every row counts on and no status input moved

    def _plain(self, values: Floats, breaks: Sequence[int]) -> bool:
        plan = self._plan
        for number, rule in enumerate(plan.inputs):
            held = self._status[number]
            column = values[:, rule.position]
            if not (column[0] == held if len(column) == 1 else (column == held).all()):
                return False
        if plan.time is not None and not np.abs(values[:, plan.time]).max() < COUNTER_MAX:
            return False
        if plan.counter is None:
            return not breaks and not self._lost
        if self._counter is None or self._suspect is not None:
            return False
        return self._counts_on(values[:, plan.counter], self._counter)

    def _counts_on(self, column: Floats, counter: int) -> bool:
        modulus = self._plan.modulus
        if len(column) > SCALAR_ROWS:
            expected = counter + 1.0 + np.arange(len(column))
            if modulus is not None:
                expected %= modulus
            if not (column == expected).all() or expected[-1] >= COUNTER_MAX:
                return False
            self._counter = int(expected[-1])
            return True
        for found in column.tolist():
            counter += 1
            if counter == modulus:
                counter = 0
            if found != counter or counter >= COUNTER_MAX:
                return False
        self._counter = counter
        return True

    # -- everything else, row by row

    def _one_by_one(self, values: Floats, breaks: Sequence[int]) -> tuple[list[_Segment], Mapping[str, int]]:
        plan = self._plan
        counters = None if plan.counter is None else values[:, plan.counter].tolist()
        status = [values[:, rule.position].tolist() for rule in plan.inputs]
        broken = set(breaks)
        segments: list[_Segment] = []
        rejected: dict[str, int] = {}
        for row in range(len(values)):
            self._lost = self._lost or row in broken
            readings = [column[row] for column in status]
            tick = 0.0 if plan.time is None else float(values[row, plan.time])
            verdict = self._gap_before(readings, tick, None if counters is None else counters[row])
            self._lost = isinstance(verdict, Reason)
            if isinstance(verdict, Reason):
                rejected[verdict] = rejected.get(verdict, 0) + 1
            else:
                self._append(segments, row, verdict, readings)
        return segments, rejected

    def _append(self, segments: list[_Segment], row: int, gap: int, readings: list[float]) -> None:
        if gap or not segments:
            self._next_index += max(gap, 0)
            segments.append(_Segment(self._next_index, gap, [], []))
        segment = segments[-1]
        for number, value in enumerate(readings):
            active = self._plan.inputs[number].active(value)
            if active is not self._active[number]:
                self._active[number] = active
                segment.changes.append((len(segment.rows), number, active))
        self._status = readings
        segment.rows.append(row)
        self._next_index += 1

    def _gap_before(self, readings: list[float], tick: float, counter: float | None) -> int | Reason:
        for rule, value in zip(self._plan.inputs, readings, strict=True):
            if not abs(value) < COUNTER_MAX or (rule.bit is not None and value != int(value)):
                return Reason.STATUS
        if not abs(tick) < COUNTER_MAX:
            return Reason.TIME
        if counter is None:
            return GAP_UNKNOWN if self._lost and self._next_index > 0 else 0
        limit = COUNTER_MAX if self._plan.modulus is None else self._plan.modulus
        if not 0.0 <= counter < limit or counter != int(counter):
            return Reason.COUNTER
        return self._judge_counter(int(counter))

    def _judge_counter(self, counter: int) -> int | Reason:
        last, modulus = self._counter, self._plan.modulus
        if last is None:
            self._counter = counter
            return 0
        step = counter - last if modulus is None else (counter - last) % modulus
        if step == 0:
            return Reason.DUPLICATE
        if 0 < step <= self._leap_rows:
            self._counter, self._suspect = counter, None
            return step - 1
        return self._suspect_counter(counter, step)

    def _suspect_counter(self, counter: int, step: int) -> int | Reason:
        modulus = self._plan.modulus
        if self._suspect is not None:
            onward = counter - self._suspect if modulus is None else (counter - self._suspect) % modulus
            self._suspect_rows = self._suspect_rows + 1 if onward == 1 else 1
        else:
            self._suspect_rows = 1
        self._suspect = counter
        if self._suspect_rows >= RESTART_ROWS:
            self._counter, self._suspect = counter, None
            return GAP_UNKNOWN
        back = step < 0 if modulus is None else step > modulus // 2
        return Reason.ORDER if back else Reason.LEAP
