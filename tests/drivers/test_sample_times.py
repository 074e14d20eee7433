"""Sample times without a counter: arrivals, and a device clock. They rise, and are never later than the
arrival."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from wire_frames import decode, lines_frame, packets_frame

from drivers.lines import LinesDecoder
from drivers.packets import PacketsDecoder, PacketsEncoder
from drivers.timing import ArrivalTiming, DeviceTiming, rising

CHANNEL = [{"name": "force", "column": 2}]


@given(
    starts=st.lists(st.floats(-1.0, 1.0), min_size=1, max_size=20),
    after=st.floats(-2.0, 2.0),
)
@settings(max_examples=50, deadline=None)
def test_rising_times_rise_and_are_touched_only_where_needed(starts, after):
    times = np.array(starts)
    found = rising(times, after)
    assert found[0] > after
    assert np.all(np.diff(found) > 0)
    if times[0] > after and np.all(np.diff(times) > 0):
        assert np.array_equal(found, times)


def test_rows_that_arrive_together_lie_one_period_apart():
    timing = ArrivalTiming(0.01)
    assert timing.feed(0, None, 3, 5.0) == pytest.approx([4.98, 4.99, 5.0])
    assert timing.feed(3, None, 1, 5.01) == pytest.approx([5.01])
    squeezed = timing.feed(4, None, 4, 5.02)  # four rows where one was due: they share the time there is
    assert squeezed[0] > 5.01 and squeezed[-1] == 5.02 and np.ptp(np.diff(squeezed)) < 1e-12
    same = timing.feed(8, None, 2, 5.02)
    assert same[0] > 5.02 and same[-1] - 5.02 < 1e-6


def test_a_device_clock_is_followed_through_late_arrivals():
    """Arrivals late by 0 to 9 ms at random: the times are those of the device but for the least delay."""
    timing = DeviceTiming()
    rng = np.random.default_rng(4)
    device_s = np.arange(2000) * 0.01 + 300.0
    late_s = rng.uniform(0.0, 0.009, 2000)
    found = np.concatenate(
        [timing.feed(n, device_s[n : n + 1], 1, device_s[n] + 7.0 + late_s[n]) for n in range(2000)]
    )
    error_s = found[200:] - (device_s[200:] + 7.0)
    assert error_s.max() < 0.001
    assert error_s.min() >= 0.0


def test_a_device_clock_of_16_bit_milliseconds_wraps_without_a_trace():
    fields = [{"name": "t", "number": "uint16"}, {"name": "f", "number": "int16"}]
    frame = packets_frame(
        {"sync": "fa", "checksum": "crc16", "fields": fields, "time_field": "t", "time_unit_s": 0.001},
        [{"name": "force", "field": "f"}],
    )
    times = 60.0 + np.arange(20_000) * 0.001
    encoder = PacketsEncoder(frame, 0)
    pieces = [encoder.encode(np.zeros((100, 1)), time_s=times[n : n + 100]) for n in range(0, 20_000, 100)]
    result = decode(PacketsDecoder(frame, 0), pieces, start_s=0.0, step_s=0.1)
    assert np.diff(result.times) == pytest.approx(0.001, abs=1e-6)


def test_a_damaged_device_time_does_not_shift_the_rows_after_it():
    frame = lines_frame({"prefix": "D", "time_column": 1, "time_unit_s": 0.001}, CHANNEL)
    decoder = LinesDecoder(frame, 0)
    ticks = [1000, 1001, 1002, 9_001_003, 1004, 1005, 3, 1007, 1008]
    result = decode(decoder, [b"D%d,0\r\n" % tick for tick in ticks], start_s=50.0, step_s=0.001)
    assert result.times == pytest.approx([50.0 + 0.001 * number for number in range(9)], abs=0.0021)
    assert decode(LinesDecoder(frame, 0), [b"D1,0\r\nDnan,0\r\nD1e300,0\r\n"]).rejected == {"time": 2}
