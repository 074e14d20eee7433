"""Counter: the device's own sample number, unwrapped. Gaps are counted, duplicates and wild values
rejected. Pure.

A counter that goes back, or leaps further than LEAP_S of samples, is not believed until RESTART_ROWS rows
in a row count on from there: one damaged counter must not hide a million samples, a restarted device must
not stay mute.
"""

from __future__ import annotations

import numpy as np

from daq.stream.block import GAP_UNKNOWN, Floats
from drivers.decoded import Reason

LEAP_S = 10.0
RESTART_ROWS = 4
WHOLE_MAX = 2.0**53
"""Whole numbers are exact in a float up to here."""


class Counter:
    """Carried state of one source. modulus None: the counter never wraps."""

    def __init__(self, modulus: int | None, rate_hz: float) -> None:
        self._modulus = modulus
        self._limit = WHOLE_MAX if modulus is None else float(modulus)
        self._leap_rows = max(int(LEAP_S * rate_hz), 2)
        if modulus is not None:
            self._leap_rows = min(self._leap_rows, max((modulus - 1) // 2, 1))
        self._last: int | None = None
        self._suspect: int | None = None
        self._suspect_rows = 0

    def judge(self, value: float) -> int | Reason:
        """Samples missing before this one, GAP_UNKNOWN after a restart, or why it is rejected."""
        if not 0.0 <= value < self._limit or value != int(value):
            return Reason.COUNTER
        counter = int(value)
        if self._last is None:
            self._last = counter
            return 0
        step = self._step(self._last, counter)
        if step == 0:
            return Reason.DUPLICATE
        if 0 < step <= self._leap_rows:
            self._last, self._suspect = counter, None
            return step - 1
        return self._judge_suspect(counter, step)

    def counts_on(self, value: float) -> bool:
        """This is simply the next one: take it. Otherwise nothing has changed."""
        if self._last is None or self._suspect is not None:
            return False
        expected = self._last + 1
        if expected == self._modulus:
            expected = 0
        if value != expected or expected >= WHOLE_MAX:
            return False
        self._last = expected
        return True

    def follows(self, value: float, ahead: int) -> bool:
        """This would simply be the next one after `ahead` others."""
        if self._last is None or self._suspect is not None:
            return False
        expected = self._last + 1 + ahead
        if self._modulus:
            expected %= self._modulus
        return value == expected and expected < WHOLE_MAX

    def take_run(self, column: Floats) -> int:
        """How many, from the first on, simply count on: these are taken."""
        if self._last is None or self._suspect is not None:
            return 0
        expected = self._last + 1.0 + np.arange(len(column))
        if self._modulus is not None:
            expected %= self._modulus
        good = (column == expected) & (expected < WHOLE_MAX)
        run = len(good) if good.all() else int(good.argmin())
        if run:
            self._last = int(expected[run - 1])
        return run

    def takes_all(self, column: Floats) -> bool:
        """Whether all of them simply count on, and then they are taken; otherwise nothing has changed."""
        before = self._last
        if self.take_run(column) == len(column):
            return True
        self._last = before
        return False

    def _step(self, before: int, after: int) -> int:
        return after - before if self._modulus is None else (after - before) % self._modulus

    def _judge_suspect(self, counter: int, step: int) -> int | Reason:
        onward = self._suspect is not None and self._step(self._suspect, counter) == 1
        self._suspect_rows = self._suspect_rows + 1 if onward else 1
        self._suspect = counter
        if self._suspect_rows >= RESTART_ROWS:
            self._last, self._suspect = counter, None
            return GAP_UNKNOWN
        back = step < 0 if self._modulus is None else step > self._modulus // 2
        return Reason.ORDER if back else Reason.LEAP
