"""The zero: whole mains periods, noise, drift, and what it refuses."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from daq.watch.requests import StartRun
from daq.watch.tare import Collector, TareRules, take, tare_seconds
from daq.watch.values import State
from tests.watch.frames import frame, open_run
from tests.watch.rig import Machine, Rig

RULES = TareRules(capacity_n=1000.0, zero_n=0.0, quiet_n=0.15, step_n=0.016, previous_n=None, run_s=16.0)


def rest(
    rate_hz: float = 1000.0,
    *,
    sigma: float = 0.15,
    level: float = 0.0,
    drift_n_s: float = 0.0,
    hum_hz: float = 0.0,
    hum_n: float = 0.0,
    seconds: float | None = None,
    seed: int = 0,
) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    t = np.arange(round((seconds or tare_seconds(rate_hz)) * rate_hz)) / rate_hz + 5.0
    x = level + drift_n_s * (t - t[0]) + hum_n * np.sin(2 * np.pi * hum_hz * t + rng.uniform(0, 6))
    x = x + sigma * rng.standard_normal(len(t))
    return t, np.round(x / 0.016) * 0.016


def test_a_quiet_zero_is_taken_with_its_uncertainty() -> None:
    errors = []
    for seed in range(60):
        taken = take(*rest(level=3.0, seed=seed), RULES)
        assert not taken.reasons
        errors.append(taken.note.tare_n - 3.0)
        assert taken.note.sigma_n == pytest.approx(0.15, rel=0.25)
        assert taken.note.samples == 1000
    # median of ten block means: 1.18 times the error of the mean (common practice, no source)
    assert np.std(errors) < 2.0 * 0.15 / np.sqrt(1000)


@pytest.mark.parametrize("hum_hz", [50.0, 60.0])
@pytest.mark.parametrize("rate_hz", [80.0, 100.0, 1000.0, 1600.0])
def test_hum_leaves_the_zero_even_where_it_is_aliased(hum_hz: float, rate_hz: float) -> None:
    """Acceptance scenario 4: 2 N of hum at 80 S/s, error below 0.1 N; the noise it makes does not refuse the zero."""
    rules = replace(RULES, capacity_n=10_000.0, quiet_n=0.4)
    for seed in range(5):
        times, gross = rest(rate_hz, sigma=0.4, level=7.0, hum_hz=hum_hz, hum_n=2.0, seed=seed)
        taken = take(times, gross, rules)
        assert not taken.reasons, taken.reasons
        assert abs(taken.note.tare_n - 7.0) < (0.1 if rate_hz >= 1000 else 0.25)


def test_load_on_the_fixture_is_refused_with_the_measured_force() -> None:
    taken = take(*rest(level=30.0), RULES)
    assert any(reason.startswith("gross force") for reason in taken.reasons)
    assert taken.note.tare_n == pytest.approx(30.0, abs=0.5)
    assert not taken.final  # a named override may pass it


def test_drift_is_refused_once_it_is_sure() -> None:
    """Acceptance scenario 8: 0.05 N/s is 3 N/min, 1 N/min is allowed."""
    sure = take(*rest(drift_n_s=0.05, seconds=3.0), RULES)
    assert any("drift" in reason for reason in sure.reasons)
    assert sure.note.drift_n_min == pytest.approx(3.0, abs=0.8)


def test_noise_alone_is_hardly_ever_taken_for_drift() -> None:
    refused = sum(bool(take(*rest(seed=seed), RULES).reasons) for seed in range(300))
    assert refused <= 1


@pytest.mark.parametrize(("sigma", "refused"), [(0.3, False), (0.7, True)])
def test_noise_above_three_times_the_quiet_record_is_refused(sigma: float, refused: bool) -> None:
    taken = take(*rest(sigma=sigma), RULES)
    assert any("noise" in reason for reason in taken.reasons) is refused


@pytest.mark.parametrize("value", [np.nan, np.inf])
def test_what_is_no_number_is_refused_for_good(value: float) -> None:
    times, gross = rest()
    gross[500] = value
    assert take(times, gross, RULES).final


def test_a_signal_that_never_moves_is_refused_for_good_unless_the_quiet_record_says_so() -> None:
    times, gross = rest(sigma=0.0)
    assert take(times, gross, RULES).final
    coarse = replace(RULES, quiet_n=0.05, step_n=1.0)
    assert not take(times, gross, coarse).reasons


@pytest.mark.parametrize(("previous", "refused"), [(-9.0, False), (-11.0, True)])
def test_a_zero_far_from_the_last_one_is_refused(previous: float, refused: bool) -> None:
    taken = take(*rest(level=0.0), replace(RULES, previous_n=previous))
    assert bool(taken.reasons) is refused


def test_the_collector_gives_whole_seconds_and_can_look_longer() -> None:
    collector = Collector(100.0)
    for n in range(1000):
        if collector.full:
            break
        collector.times_s.append(n / 100.0)
        collector.gross_n.append(0.0)
    times, _ = collector.cut()
    assert len(times) == 100
    looked = 0
    while collector.look_longer():
        looked += 1
    assert looked == 4
    collector.begin_again()
    assert not collector.full and collector.seconds == 1.0


def test_a_coarse_converter_is_given_longer_before_it_is_called_frozen() -> None:
    times, fine = rest(sigma=0.15)
    rng = np.random.default_rng(1)
    coarse = np.round(rng.standard_normal(1000) * 0.2)
    assert take(times, fine, RULES).note.frozen_samples <= 9
    note = take(times, coarse, replace(RULES, step_n=1.0, quiet_n=0.2)).note
    assert note.dull and note.frozen_samples > 100


# --- in the pipeline


def test_the_zero_is_tried_until_it_can_be_taken() -> None:
    rig = Rig().run_for(0.2)
    load = [30.0]
    rig.disturb = lambda t, f: f + load[0]
    rig.ask(open_run())
    rig.run_for(3.0)
    assert rig.pipe.state is State.AT_REST
    refused = rig.one("tare_refused")  # said once, not every second
    assert float(refused["gross_n"]) == pytest.approx(30.0, abs=0.5)  # type: ignore[arg-type]
    load[0] = 0.0
    rig.run_until(lambda: rig.pipe.state is State.READY, 4.0)
    assert rig.pipe.state is State.READY


def test_a_drift_that_one_second_cannot_tell_from_noise_is_looked_at_longer() -> None:
    rig = Rig().run_for(0.2)
    rig.disturb = lambda t, f: f + 0.05 * t
    rig.ask(open_run())
    rig.run_for(5.9)
    assert rig.pipe.state is State.AT_REST
    assert "drift" in str(rig.one("tare_refused")["reasons"])


def test_no_zero_is_taken_while_the_crosshead_moves() -> None:
    rig = Rig(machine=Machine(gap_mm=50.0)).run_for(0.2)
    rig.machine.speed_mm_s = 0.1
    rig.ask(open_run())
    rig.run_for(1.5)
    assert "moving" in str(rig.one("tare_refused")["reasons"])


def test_a_start_is_refused_where_something_came_to_rest_on_the_cell_after_the_zero() -> None:
    rig = Rig().ready()
    rig.disturb = lambda t, f: f + 12.0
    rig.run_for(0.1)
    with pytest.raises(Exception, match="rest on the cell"):
        rig.ask(StartRun())


def test_a_wrong_sample_rate_is_told() -> None:
    rig = Rig(frame(rate_hz=1000.0))
    rig.rate_hz = 800.0
    rig.ready()
    told = rig.one("sample_rate_off")
    assert float(told["measured_hz"]) == pytest.approx(800.0, rel=0.01)  # type: ignore[arg-type]


def test_what_the_watch_can_see_is_said_before_the_start() -> None:
    rig = Rig().ready()
    assert rig.one("envelope")["detects"] is True
    noisy = Rig(frame(rate_hz=10.0, cell__noise_quiet_n=5.5), noise_n=5.5)
    noisy.run_for(0.5)
    noisy.ask(open_run())
    noisy.run_until(lambda: noisy.pipe.state is State.READY, 20.0)
    told = noisy.one("envelope")
    assert told["detects"] is False and "noise" in str(told["reasons"])
