"""A force that stands still before the first zero: dead, or only quiet on a coarse converter."""

from __future__ import annotations

import numpy as np
import pytest

from daq.watch.repeats import repeat_probability, still_samples
from daq.watch.requests import Jog
from daq.watch.values import State
from tests.watch.frames import frame
from tests.watch.rig import Machine, Rig

COARSE = {"channels__0__scale": 1.0, "channels__0__counts_min": -2000, "channels__0__counts_max": 2000}


def jogged(*, quiet_n: float | None, rest_s: float, dead_from_s: float = 0.0, **channel: object) -> Rig:
    """A slow jog of 4 s on a force that stands still from that moment on."""
    rig = Rig(frame(cell__noise_quiet_n=quiet_n, **channel), Machine(gap_mm=50.0))  # type: ignore[arg-type]
    rig.count_of = lambda t, count: 0.0 if t >= dead_from_s else count
    rig.run_for(rest_s)
    rig.ask(Jog(0.4, 6.0))
    return rig.run_for(6.0)


@pytest.mark.slow
def test_a_quiet_cell_on_a_coarse_converter_may_stand_still_during_a_jog() -> None:
    """Counts of 1 N, quiet record 0.05 N: it never changes by itself, and nothing is touched."""
    for quiet_n in (0.05, None):
        rig = jogged(quiet_n=quiet_n, rest_s=1.0, **COARSE)
        assert not rig.named("signal_lost")
        assert rig.pipe.state is State.AT_REST and rig.machine.at_mm == pytest.approx(0.4, abs=0.05)


@pytest.mark.slow
def test_one_that_should_change_by_itself_is_dead() -> None:
    """Counts of 16 mN, quiet record 0.15 N; and, without a quiet record, one that was seen to change at rest."""
    for quiet_n, dead_from_s in ((0.15, 0.0), (None, 0.9)):
        rig = jogged(quiet_n=quiet_n, rest_s=1.0, dead_from_s=dead_from_s)
        assert rig.named("signal_lost")[0]["why"] == "the value stands still"
        assert rig.pipe.state is State.SIGNAL_LOST and rig.machine.at_mm < 0.15


@pytest.mark.parametrize("sigma", [0.05, 0.2, 0.3, 1.0, 4.0])
def test_the_likelihood_of_a_repeat(sigma: float) -> None:
    """Against counted noise; a million pairs, so that 0.002 is beyond chance."""
    counts = np.round(sigma * np.random.default_rng(0).standard_normal(1_000_000))
    seen = float(np.mean(counts[1:] == counts[:-1]))
    assert repeat_probability(1.0, sigma) == pytest.approx(seen, abs=2e-3)


def test_how_many_repeats_are_too_many() -> None:
    assert still_samples(1.0, 0.05) is None
    fine = still_samples(0.016, 0.15)
    assert fine is not None and fine <= 6
    half = still_samples(1.0, 0.3)
    assert half is not None and 50 < half < 200
