"""The device's counter unwrapped: gaps, repeats, order, restarts, against a plain account of what was
sent."""

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.stream.block import GAP_UNKNOWN
from drivers.counter import RESTART_ROWS, Counter
from drivers.numbering import Numbering
from drivers.plan import InputRule, RowPlan
from drivers.timing import ArrivalTiming, CounterTiming

PLAN = RowPlan(channels=1, counter=1, modulus=256)


def numbering(plan: RowPlan = PLAN, rate_hz: float = 1000.0) -> Numbering:
    return Numbering(plan, CounterTiming(1 / rate_hz), source=3, rate_hz=rate_hz)


def blocks_of(numbered) -> list[tuple[int, int, list[float]]]:
    return [(block.first_index, block.gap_samples, block.counts[:, 0].tolist()) for block in numbered.blocks]


def test_wrap_gap_repeat_and_a_step_back():
    found = numbering().number(
        np.array([[1, 254], [2, 255], [3, 0], [4, 3], [5, 3], [6, 2], [7, 4]], dtype=float), (), 1.0
    )
    assert blocks_of(found) == [(0, 0, [1, 2, 3]), (5, 2, [4, 7])]
    assert found.rejected == {"duplicate": 1, "order": 1}
    assert found.blocks[0].source == 3


def test_a_counter_that_is_none_is_rejected():
    rows = np.array([[1, 1], [2, 1.5], [3, -1], [4, 256], [5, np.nan], [6, 2]], dtype=float)
    found = numbering().number(rows, (), 1.0)
    assert blocks_of(found) == [(0, 0, [1, 6])]
    assert found.rejected == {"counter": 4}


def test_one_wild_counter_does_not_hide_what_follows():
    plan = RowPlan(channels=1, counter=1)
    rows = np.array([[1, 10], [2, 11], [3, 900_000_000], [4, 13], [5, 14]], dtype=float)
    found = numbering(plan).number(rows, (), 1.0)
    assert blocks_of(found) == [(0, 0, [1, 2]), (3, 1, [4, 5])]
    assert found.rejected == {"leap": 1}


@pytest.mark.parametrize("modulus", [None, 65536])
def test_a_restarted_device_is_believed_after_a_few_rows(modulus):
    plan = RowPlan(channels=1, counter=1, modulus=modulus)
    counters = [40_000, 40_001, *range(20)]
    rows = np.array([[number, counter] for number, counter in enumerate(counters)], dtype=float)
    found = numbering(plan).number(rows, (), 1.0)
    assert sum(found.rejected.values()) == RESTART_ROWS - 1
    assert set(found.rejected) <= {"order", "leap"}  # under a modulus back and far ahead are the same
    assert found.blocks[1].gap_samples == GAP_UNKNOWN
    assert found.blocks[1].first_index == 2
    assert found.blocks[1].count == 20 - RESTART_ROWS + 1


def test_times_rise_over_a_restart_and_follow_the_arrivals():
    counter = numbering(RowPlan(channels=1, counter=1))
    first = counter.number(np.array([[0.0, 5000.0 + n] for n in range(100)]), (), 10.0)
    later = counter.number(np.array([[0.0, float(n)] for n in range(100)]), (), 15.0)
    assert later.blocks[-1].time_s[0] > first.blocks[-1].time_s[-1]
    assert later.blocks[-1].time_s[-1] == pytest.approx(15.0, abs=1e-3)


@pytest.mark.slow
@given(
    data=st.data(),
    modulus=st.sampled_from((16, 256, 65536, None)),
    begin=st.integers(0, 70_000),
)
@settings(max_examples=60, deadline=None)
def test_indices_are_those_of_the_sender(data, modulus, begin):
    """Samples dropped and doubled at random: each that arrives keeps its number, each gap its length."""
    steps = data.draw(st.lists(st.sampled_from((1, 1, 1, 1, 1, 0, 2, 5)), min_size=1, max_size=300))
    numbers = begin + np.cumsum([0, *steps])
    counters = numbers if modulus is None else numbers % modulus
    rows = np.column_stack((numbers, counters)).astype(float)
    device = numbering(RowPlan(channels=1, counter=1, modulus=modulus))
    edges = [0, *sorted(data.draw(st.lists(st.integers(0, len(rows)), max_size=4))), len(rows)]
    expected = begin
    rejected = 0
    for start, stop in itertools.pairwise(edges):
        found = device.number(rows[start:stop], (), 1.0 + stop)
        rejected += found.rejected.get("duplicate", 0)
        for block in found.blocks:
            assert block.counts[0, 0] == begin + block.first_index
            assert block.counts[0, 0] - expected == block.gap_samples
            assert np.all(np.diff(block.counts[:, 0]) == 1)
            expected = int(block.counts[-1, 0]) + 1
    assert expected == numbers[-1] + 1
    assert rejected == steps.count(0)


def test_the_status_bits_are_those_of_the_row_where_they_change():
    rule = InputRule("shield_open", 1, 2, active_when=True)
    device = Numbering(RowPlan(channels=1, inputs=(rule,)), ArrivalTiming(0.001), source=0, rate_hz=1000.0)
    values = np.zeros((200, 2))
    values[150:, 1] = 4.0
    found = device.number(values, (), 1.0)
    assert len(found.blocks) == 1
    assert [(sample.active, sample.time_s) for sample in found.inputs] == [
        (False, found.blocks[0].time_s[0]),
        (True, found.blocks[0].time_s[150]),
    ]


def test_a_run_ends_where_the_counter_does_not_count_on():
    counter = Counter(1000, 1000.0)
    assert counter.judge(998.0) == 0
    column = np.array([*range(999, 1000), *range(0, 200), 300, *range(301, 400)], dtype=float)
    assert counter.take_run(column) == 201
    assert counter.take_run(column[201:]) == 0
    assert counter.judge(300.0) == 100
    assert counter.take_run(column[202:]) == 99
