"""Sensors lag, round, hum and fail as declared, and give the same counts however the stream is cut."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.cards.frame import Channel
from simulator.card import ForceSensor
from simulator.faults import Drift, Glitch, NoiseBurst, SensorFault, UnitSlip
from simulator.sensors import Noise, Sensor

PERIOD_S = 0.001


def sensor(card: ForceSensor | None = None, *, whole: bool = False, **channel) -> Sensor:
    wiring = Channel(
        name="force", link="main", role="force", unit="N", column=2, **{"scale": 0.016, **channel}
    )
    return Sensor(wiring, card or ForceSensor(zero=0.0), 0.0, PERIOD_S, whole=whole, seed=(1, 2, 3))


def times(count: int, first: int = 0) -> np.ndarray:
    return np.arange(first, first + count) * PERIOD_S


def test_counts_are_the_inverse_of_the_cards_calibration():
    made = sensor(scale=0.016, offset=4.0, sign=-1)
    counts = made.counts(0, times(1), np.array([250.0]))
    assert -(counts * 0.016 + 4.0) == pytest.approx([250.0], abs=0.008)


def test_rails_clip_and_lsb_rounds():
    clipped = sensor(counts_min=-1000.0, counts_max=1000.0).counts(0, times(3), np.array([-99.0, 1.0, 99.0]))
    assert clipped.tolist() == [-1000.0, 62.0, 1000.0]
    coarse = sensor(ForceSensor(lsb=0.5), scale=1.0).counts(0, times(2), np.array([1.3, 1.2]))
    assert coarse.tolist() == [1.5, 1.0]


def test_noise_has_its_sigma_and_no_memory():
    values = sensor(ForceSensor(noise=2.0), scale=1e-4).counts(0, times(20_000), np.zeros(20_000)) * 1e-4
    assert values.std() == pytest.approx(2.0, rel=0.03)
    assert abs(values.mean()) < 4 * 2.0 / math.sqrt(20_000)
    assert abs(np.corrcoef(values[1:], values[:-1])[0, 1]) < 4 / math.sqrt(20_000)


def test_hum_is_seen_at_its_alias():
    """50 Hz at 80 samples/s shows at 30 Hz."""
    at_s = np.arange(800) / 80
    values = sensor(ForceSensor(hum=2.0, hum_hz=50.0), scale=1e-6).counts(0, at_s, np.zeros(800))
    spectrum = np.abs(np.fft.rfft(values * 1e-6)) / 400
    assert np.fft.rfftfreq(800, 1 / 80)[spectrum.argmax()] == pytest.approx(30.0)
    assert spectrum.max() == pytest.approx(2.0, rel=1e-3)


def test_a_lag_follows_a_ramp_by_tau():
    """First-order lag of a steady ramp: late by tau, once settled."""
    made = sensor(ForceSensor(time_constant_s=0.08), scale=1e-9)
    at_s = times(2000)
    values = made.counts(0, at_s, 100.0 * at_s) * 1e-9
    assert values[-1] == pytest.approx(100.0 * (at_s[-1] - 0.08), abs=1e-6)
    assert values[80] == pytest.approx(100 * (0.08 - 0.08 * (1 - math.exp(-1))), abs=1e-6)


def test_a_drift_of_the_card_counts_from_power_on():
    made = sensor(ForceSensor(drift_per_s=0.05), scale=1e-6)
    assert made.counts(0, times(10_001), np.zeros(10_001))[-1] * 1e-6 == pytest.approx(0.5)


@pytest.mark.parametrize(
    ("fault", "expected"),
    [
        (SensorFault(kind="zeros"), 0.0),
        (SensorFault(kind="saturation"), 75_000.0),
        (SensorFault(kind="wrong-polarity"), -6250.0),
        (UnitSlip(kind="unit-slip", factor=0.001), 6.0),
        (Drift(kind="drift", per_s=1000.0), None),
    ],
)
def test_faults_show_between_their_times_only(fault, expected):
    made = sensor(counts_max=75_000.0)
    made.begin(fault.model_copy(update={"for_s": 0.01}), 0.005)
    counts = made.counts(0, times(30), np.full(30, 100.0))
    hit = np.zeros(30, dtype=bool)
    hit[6:16] = True
    assert (counts[~hit] == 6250.0).all()
    if expected is None:
        assert counts[hit] * 0.016 - 100 == pytest.approx(np.arange(1, 11), abs=0.01)
    else:
        assert (counts[hit] == expected).all()


def test_not_a_number_is_a_rail_where_integers_are_sent():
    text, packet = sensor(), sensor(whole=True, counts_min=-8388608.0)
    for made in (text, packet):
        made.begin(SensorFault(kind="nan"), -1.0)
    assert math.isnan(text.counts(0, times(1), np.zeros(1))[0])
    assert packet.counts(0, times(1), np.zeros(1))[0] == -8388608.0


def test_frozen_values_repeat_the_last_one_and_come_back():
    made = sensor(ForceSensor(noise=1.0))
    made.begin(SensorFault(kind="freeze", for_s=0.01), 0.0095)
    counts = np.concatenate([made.counts(at, times(5, at), np.zeros(5)) for at in range(0, 40, 5)])
    assert (counts[10:20] == counts[9]).all()
    assert np.unique(counts[:10]).size > 3
    assert np.unique(counts[20:]).size > 3


FAULTS = (
    Glitch(kind="glitch", size=400.0, samples=2),
    SensorFault(kind="freeze", for_s=0.02),
    SensorFault(kind="zeros", for_s=0.005),
    NoiseBurst(kind="noise", sigma=5.0, for_s=0.03),
    Drift(kind="drift", per_s=30.0, for_s=0.03),
)


@settings(deadline=None, max_examples=40)
@given(
    cuts=st.lists(st.integers(1, 60), max_size=12),
    fault=st.sampled_from(FAULTS),
    at_s=st.floats(-0.01, 0.12),
    tau_s=st.sampled_from([0.0, 0.003]),
)
def test_any_cut_gives_the_same_counts(cuts, fault, at_s, tau_s):
    card = ForceSensor(noise=0.5, hum=1.0, drift_per_s=0.1, time_constant_s=tau_s, zero=1.0)
    true = np.linspace(0.0, 50.0, 150)
    whole, pieces = sensor(card), sensor(card)
    whole.begin(fault, at_s)
    pieces.begin(fault, at_s)
    expected = whole.counts(0, times(150), true)
    got, at = [], 0
    for size in (*cuts, 150):
        end = min(at + size, 150)
        got.append(pieces.counts(at, times(end - at, at), true[at:end]))
        at = end
    assert np.array_equal(np.concatenate(got), expected)


@settings(deadline=None, max_examples=40)
@given(kept=st.integers(0, 40), tau_s=st.sampled_from([0.0, 0.003]))
def test_a_block_taken_back_comes_again(kept, tau_s):
    """Rows made ahead and dropped leave no trace."""
    card = ForceSensor(noise=0.5, time_constant_s=tau_s)
    true = np.linspace(0.0, 50.0, 80)
    straight, ahead = sensor(card), sensor(card)
    expected = straight.counts(0, times(80), true)
    first = ahead.counts(0, times(40), true[:40])[:kept]
    ahead.rewind(40 - kept)
    again = ahead.counts(kept, times(80 - kept, kept), true[kept:])
    assert np.array_equal(np.concatenate((first, again)), expected)


def test_noise_is_a_function_of_the_sample_number():
    whole = Noise((1,)).of(0, 10_000)
    other = Noise((1,))
    assert np.array_equal(other.of(4000, 200), whole[4000:4200])
    assert np.array_equal(other.of(0, 1), whole[:1])
    assert not np.array_equal(Noise((2,)).of(0, 10), whole[:10])
