"""The bounded trace: no spike, no drop and no unloading branch is ever hidden, however many rows pass."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from monitor.tracebuffer import DEFLECTION, LOAD, STRAIN, TIME, TraceBuffer, extremes, thin_xy


def rows(count: int, start: int = 0, load: np.ndarray | None = None) -> dict[str, np.ndarray]:
    time_s = np.arange(start, start + count) / 1000.0
    load_n = time_s * 10.0 if load is None else load
    return {
        "time_s": time_s,
        "net_n": load_n,
        "deflection_mm": time_s * 0.01,
        "stress_mpa": load_n,
        "strain": time_s * 1e-4,
    }


@settings(deadline=None, max_examples=40)
@given(
    values=st.lists(st.floats(-1e6, 1e6) | st.just(float("nan")), min_size=1, max_size=400),
    stretches=st.integers(1, 60),
)
def test_extremes_and_ends_stay_in_order(values: list[float], stretches: int) -> None:
    column = np.array(values)
    kept = extremes((column,), stretches)
    assert list(kept) == sorted(set(kept)) and kept[0] == 0 and kept[-1] == len(column) - 1
    if np.isfinite(column).any():
        assert np.nanmax(column[kept]) == np.nanmax(column)
        if not np.isnan(column).any():
            assert column[kept].min() == column.min()


def test_a_spike_of_one_sample_is_drawn_whatever_its_place() -> None:
    for place in (0, 1, 777, 99_998, 99_999):
        load = np.zeros(100_000)
        load[place] = 400.0
        x, y = thin_xy(np.arange(100_000.0), load, 500)
        assert y.max() == 400.0 and x[y.argmax()] == place and len(x) <= 1100


def test_spikes_survive_an_hour_of_rows_and_memory_does_not_grow() -> None:
    """3.6 million rows in pieces through a small buffer: each of the ten spikes is still there, in order."""
    buffer, spikes = TraceBuffer(rows_max=4096), range(50_000, 3_600_000, 400_000)
    for start in range(0, 3_600_000, 40_000):
        load = np.linspace(0.0, 1.0, 40_000)
        for spike in spikes:
            if start <= spike < start + 40_000:
                load[spike - start] = 1000.0 + spike / 1e6
        buffer.take(rows(40_000, start, load))
    assert buffer.seen == 3_600_000 and len(buffer) <= 4096
    high = buffer.column(LOAD)[buffer.column(LOAD) > 1000.0]
    assert list(np.round((high - 1000.0) * 1e6)) == list(spikes)
    assert np.all(np.diff(buffer.column(TIME)) > 0)


def test_an_unloading_branch_stays_although_x_turns_back() -> None:
    there = np.concatenate((np.linspace(0, 1, 40_000), np.linspace(1, 0.2, 40_000)))
    x, y = thin_xy(there, there**2, 400)
    turn = int(x.argmax())
    assert (
        x[turn] == 1.0
        and x[-1] == pytest.approx(0.2)
        and np.all(np.diff(x[turn:]) <= 0)
        and np.all(np.diff(x[: turn + 1]) >= 0)
    )
    assert y[turn] == 1.0


def test_the_newest_rows_are_whole_for_the_look_at_the_break() -> None:
    buffer = TraceBuffer(rows_max=512)
    for start in range(0, 30_000, 100):
        buffer.take(rows(100, start))
    table = buffer.recent(29.0, 29.5)
    assert table.shape[1] == 501 and np.array_equal(table[TIME], np.arange(29_000, 29_501) / 1000.0)


def test_what_lies_along_a_trace_is_strain_then_deflection_then_time() -> None:
    buffer = TraceBuffer()
    assert buffer.along() == TIME
    buffer.take(rows(10))
    assert buffer.along() == STRAIN
    buffer.clear()
    buffer.take({name: column for name, column in rows(10).items() if name != "strain"})
    assert buffer.along() == DEFLECTION
