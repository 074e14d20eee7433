"""Row 28 and the computer's sleep: what two clocks say of each other."""

from __future__ import annotations

import pytest

from daq.bench.clocks import Clocks, Reading, reading

S = 1_000_000_000


@pytest.mark.parametrize(
    ("boot_s", "wall_s", "fault"),
    [
        (0.0, 0.51, "clock_step"),
        (0.0, -3600.0, "clock_step"),
        (0.0, 0.49, None),
        (0.0, -0.49, None),
        (8.0, 8.0, "suspended"),
        (0.49, 0.49, None),
        (0.51, -3600.0, "suspended"),
    ],
)
def test_a_step_a_slew_and_a_sleep(boot_s: float, wall_s: float, fault: str | None) -> None:
    clocks = Clocks(Reading(100 * S, 1_700_000_000 * S))
    found = clocks.judge(Reading(100 * S + round(boot_s * S), 1_700_000_000 * S + round(wall_s * S)))
    assert (found[0] if found else None) == fault


def test_each_step_is_told_once_and_many_small_ones_are_a_slew() -> None:
    clocks = Clocks(Reading(0, 0))
    assert clocks.judge(Reading(0, 3 * S)) == ("clock_step", "by +3.0 s")
    assert clocks.judge(Reading(0, 3 * S)) is None
    assert [clocks.judge(Reading(0, 3 * S + n * S // 10)) for n in range(60)] == [None] * 60


def test_the_real_clocks_stand_to_each_other() -> None:
    assert Clocks(reading()).judge(reading()) is None
