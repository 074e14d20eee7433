"""ClockModel against made-up devices whose true sample times are known."""

from collections.abc import Iterator

import numpy as np
import pytest

from daq.stream.clock import STEP_S, ClockModel

START_S = 1000.0


class Device:
    """Samples at its own rate; packets take their time and never overtake each other."""

    def __init__(
        self, rate_hz: float, drift_ppm: float, seed: int, jitter_s: float, least_s: float = 0.0005
    ) -> None:
        self.period_s = 1.0 / rate_hz
        self.true_period_s = self.period_s * (1.0 + drift_ppm * 1e-6)
        self.rng = np.random.default_rng(seed)
        self.jitter_s = jitter_s
        self.least_s = least_s

    def truth_s(self, first: int, count: int) -> np.ndarray:
        return START_S + self.true_period_s * np.arange(first, first + count)

    def packets(
        self, seconds: float, samples_max: int, latch_s: float = 0.0
    ) -> Iterator[tuple[int, int, float]]:
        """First index, count, arrival; with a latch, as of an adapter's latency timer, packets are merged."""
        end, first, before_s = int(seconds / self.period_s), 0, 0.0
        while first < end:
            count = int(self.rng.integers(1, samples_max + 1))
            last_s = float(self.truth_s(first + count - 1, 1)[0])
            arrival_s = last_s + self.least_s + float(self.rng.exponential(self.jitter_s))
            if latch_s:
                arrival_s = float(np.ceil(arrival_s / latch_s) * latch_s)
                behind = int((arrival_s - self.least_s - last_s) / self.true_period_s)
                count += behind
            before_s = max(arrival_s, before_s)
            yield first, count, before_s
            first += count


def errors_s(model: ClockModel, device: Device, packets: Iterator[tuple[int, int, float]]) -> np.ndarray:
    """Given times minus true ones; the promises that hold for every packet are checked on the way."""
    found, before_s = [], -np.inf
    for first, count, arrival_s in packets:
        time_s = model.feed(first, count, arrival_s, device.period_s)
        assert time_s.shape == (count,)
        assert time_s[0] > before_s
        assert (np.diff(time_s) > 0.0).all()
        waiting_s = 1e-3 * device.period_s * count
        assert time_s[-1] <= max(arrival_s, before_s) + waiting_s + 1e-9
        before_s = time_s[-1]
        found.append(time_s - device.truth_s(first, count))
    return np.concatenate(found)


@pytest.mark.slow
@pytest.mark.parametrize(
    ("rate_hz", "drift_ppm", "jitter_s", "samples_max", "error_s"),
    [
        (1000.0, 80.0, 0.0003, 4, 10e-6),
        (1000.0, -150.0, 0.001, 1, 60e-6),
        (100.0, 300.0, 0.001, 1, 60e-6),
        (5000.0, 20.0, 0.0005, 100, 30e-6),
    ],
)
def test_times_keep_to_the_device_and_drift_is_found(
    rate_hz: float, drift_ppm: float, jitter_s: float, samples_max: int, error_s: float
) -> None:
    """Jitter of a millisecond leaves errors of hundredths; the least delay stays, nothing can see it."""
    device = Device(rate_hz, drift_ppm, 1, jitter_s)
    model = ClockModel()
    found = errors_s(model, device, device.packets(20.0, samples_max))
    settled = found[len(found) // 2 :] - device.least_s
    assert np.abs(settled).max() < error_s
    assert model.drift_ppm == pytest.approx(drift_ppm, abs=5.0)
    assert 0.8 < model.jitter_s / jitter_s < 1.5, "packets that wait for each other are later than the jitter"
    assert model.restarts == 0


def test_a_latency_timer_of_16_ms_is_seen_and_mostly_undone() -> None:
    device = Device(1000.0, 40.0, 2, 0.0002)
    model = ClockModel()
    found = errors_s(model, device, device.packets(14.0, 4, latch_s=0.016))
    settled = found[len(found) // 2 :]
    assert settled.std() < 0.2e-3
    assert np.abs(settled - device.least_s).max() < 1.5e-3
    assert model.delay_s_max > 0.0


def test_a_late_first_packet_is_forgotten_without_a_jump_back() -> None:
    device = Device(1000.0, 0.0, 3, 0.0001)
    model = ClockModel()
    packets = list(device.packets(3.0, 1))
    first, count, arrival_s = packets[0]
    late = [(first, count, arrival_s + 0.05)]
    later = [(f, c, max(a, arrival_s + 0.05)) for f, c, a in packets[1:]]
    found = errors_s(model, device, iter(late + later))
    assert found[0] > 0.05
    assert np.abs(found[200:] - device.least_s).max() < 0.3e-3


def test_missing_samples_leave_a_gap_in_time() -> None:
    model = ClockModel()
    before = model.feed(0, 10, START_S, 0.001)
    after = model.feed(50, 10, START_S + 0.05, 0.001)
    assert after[0] - before[-1] == pytest.approx(0.041)


def test_cutting_packets_differently_moves_times_by_less_than_a_period() -> None:
    device = Device(1000.0, 100.0, 4, 0.0005)
    packets = list(device.packets(6.0, 8))
    whole, single, pieces = ClockModel(), ClockModel(), ClockModel()
    rng = np.random.default_rng(5)
    times: list[list[float]] = [[], [], []]
    for first, count, arrival_s in packets:
        times[0] += list(whole.feed(first, count, arrival_s, device.period_s))
        for index in range(first, first + count):
            times[1] += list(single.feed(index, 1, arrival_s, device.period_s))
        cut = int(rng.integers(0, count))
        for start, length in ((first, cut), (first + cut, count - cut)):
            if length:
                times[2] += list(pieces.feed(start, length, arrival_s, device.period_s))
    for other in times[1:]:
        apart_s = np.abs(np.array(times[0]) - np.array(other))[1100:]
        assert apart_s.max() < device.period_s


def test_the_same_calls_give_the_same_bits() -> None:
    device = Device(1000.0, 100.0, 6, 0.0005)
    packets = list(device.packets(3.0, 8))
    first, second = ClockModel(), ClockModel()
    for call in packets:
        assert first.feed(*call, device.period_s).tobytes() == second.feed(*call, device.period_s).tobytes()


@pytest.mark.parametrize("jump_s", [5.0, -5.0, 3600.0, -3600.0])
def test_a_clock_that_jumps_is_a_new_clock(jump_s: float) -> None:
    """The host slept (arrivals come early), or the device paused without counting (they come late)."""
    device = Device(1000.0, 0.0, 7, 0.0002)
    model = ClockModel()
    before_s = -np.inf
    for first, count, arrival_s in device.packets(10.0, 1):
        moved_s = arrival_s + (jump_s if first >= 4000 else 0.0)
        time_s = model.feed(first, count, moved_s, device.period_s)
        assert time_s[0] > before_s
        before_s = time_s[-1]
    if jump_s > 0.0:
        assert model.restarts == 1
        assert before_s == pytest.approx(moved_s, abs=2e-3)
    else:
        assert model.restarts >= 1
        standing_s = START_S + 4.0 + 6000 * 1e-3 * device.period_s
        assert before_s < max(standing_s, moved_s) + 2e-3, (
            "time stands nearly still until the clock caught up"
        )
    assert abs(jump_s) > STEP_S


def test_another_rate_begins_again() -> None:
    model = ClockModel()
    model.feed(0, 10, START_S, 0.001)
    time_s = model.feed(10, 10, START_S + 1.0, 0.1)
    assert time_s[-1] == pytest.approx(START_S + 1.0)
    assert np.diff(time_s) == pytest.approx(0.1)
