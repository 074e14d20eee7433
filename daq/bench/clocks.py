"""Clocks: has the computer slept, has somebody set its wall clock? Readings in, faults out; pure but for `reading`.

Rows 15 and 28 of the limits. Data are timed by the monotonic clock alone, which neither of the two moves.
"""

from __future__ import annotations

import time
from dataclasses import dataclass

SUSPEND_NS = 500_000_000
STEP_NS = 500_000_000  # row 28 of the limits; what a time service slews is a twentieth of it in 50 s


@dataclass(frozen=True, slots=True)
class Reading:
    """The boot-time clock and the wall clock, each less the monotonic one."""

    boot_ns: int
    wall_ns: int


def reading() -> Reading:
    """Now. The boot-time clock goes on while the computer sleeps, the monotonic one does not."""
    monotonic_ns = time.monotonic_ns()
    boot_ns, wall_ns = time.clock_gettime_ns(time.CLOCK_BOOTTIME), time.clock_gettime_ns(time.CLOCK_REALTIME)
    return Reading(boot_ns - monotonic_ns, wall_ns - monotonic_ns)


class Clocks:
    """Fed at every tick, so that only a step can make a difference between two readings."""

    def __init__(self, now: Reading) -> None:
        self._last = now

    def judge(self, now: Reading) -> tuple[str, str] | None:
        """(fault, detail) or None. After a sleep both clocks are ahead: that is no step."""
        last, self._last = self._last, now
        slept_ns = now.boot_ns - last.boot_ns
        if slept_ns > SUSPEND_NS:
            return "suspended", "the computer slept; whatever happened meanwhile was not seen"
        step_ns = now.wall_ns - last.wall_ns - slept_ns
        if abs(step_ns) > STEP_NS:
            return "clock_step", f"by {step_ns * 1e-9:+.1f} s"
        return None
