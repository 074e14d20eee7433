"""The fracture watch against stratified records: nothing missed, nothing stopped early, lost signals never a break."""

from __future__ import annotations

from collections import Counter

import numpy as np
import pytest

from tests.watch.records import RATES_HZ, STRATA, TOUCH_PLATEAU_N, Case, draw
from tests.watch.soak_fracture import Outcome, run

BARS_PER_STRATUM = 27  # x 15 strata: 405 bars
pytestmark = pytest.mark.slow


def describe(outcome: Outcome) -> str:
    return f"{outcome.failure} {outcome.verdict} {outcome.case}"


@pytest.mark.parametrize("stratum", STRATA)
def test_no_bar_of_a_stratum_is_missed_or_stopped_early(stratum: str) -> None:
    rates = [r for r in RATES_HZ if r < 5000] * 5
    failed = []
    for n in range(BARS_PER_STRATUM):
        rate = 10_000.0 if n == 0 else rates[n % len(rates)]
        outcome = run(draw(1000 + n, stratum, rate, brief=True))
        if outcome.failure:
            failed.append(describe(outcome))
    assert not failed, "\n".join(failed)


@pytest.mark.parametrize(("rate_hz", "median_s"), [(1000.0, 0.012), (100.0, 0.030), (10.0, 0.350)])
def test_the_delay_of_the_call(rate_hz: float, median_s: float) -> None:
    delays = [run(draw(n, "clean", rate_hz, brief=True)).delay_s for n in range(11)]
    assert np.median(delays) <= median_s
    assert min(delays) > 0


# --- acceptance scenario 11: everything in one run


def mix(rate_hz: float, negative_samples: int, seed: int) -> Case:
    return Case(
        seed=seed,
        stratum="mix",
        rate_hz=rate_hz,
        peak_n=460.0,
        sigma_n=0.15,
        ramp_s=16.0,
        toe_s=1.0,
        slips=((0.37, 0.05),),
        pop_ins=((0.55, 0.12, 0.896),),
        glitches=((0.62, 400.0, 1), (0.70, -300.0, negative_samples), (0.78, -300.0, 1)),
        ring_hz=480.0,
        ring_zeta=0.01,
        residual=0.30,
        residual_s=0.4,
    )


def counts(outcome: Outcome) -> Counter[str]:
    names = ("slip", "pop_in", "partial_drop", "glitch", "fracture", "stop_failed")
    return Counter(event.name for event in outcome.events if event.name in names)


@pytest.mark.parametrize(("rate_hz", "delay_s"), [(1000.0, 0.025), (100.0, 0.040)])
def test_the_event_mix_is_told_apart(rate_hz: float, delay_s: float) -> None:
    for seed in range(3):
        outcome = run(mix(rate_hz, 2, seed))
        assert not outcome.failure, describe(outcome)
        assert counts(outcome) == {"slip": 1, "pop_in": 1, "glitch": 3, "fracture": 1}
        assert 0 < outcome.delay_s <= delay_s
        assert outcome.verdict == "sudden break"
        broke = next(e for e in outcome.events if e.name == "fracture")
        assert abs(float(broke.fields["forecast_n"]) - 460.0) < 1.5  # type: ignore[arg-type]
        assert float(broke.fields["peak_raw_n"]) < 462.0  # type: ignore[arg-type]  # not the +400 N glitch
        residuals = [e.fields["unloaded"] for e in outcome.events if e.name == "residual"]
        assert residuals == [False, True]
        words = [e.fields["to"] for e in outcome.events if e.name == "state"]
        assert words[-3:] == ["broken? - still loaded", "broken - unloaded", "at rest"]
        assert not [e for e in outcome.events if e.name in ("polarity_locked", "signal_lost")]


def test_the_first_drop_load_and_size_are_told() -> None:
    outcome = run(mix(1000.0, 2, 5))
    slip = next(e.fields for e in outcome.events if e.name == "slip")
    pop_in = next(e.fields for e in outcome.events if e.name == "pop_in")
    assert float(slip["load_n"]) == pytest.approx(0.37 * 460.0 + TOUCH_PLATEAU_N, abs=1.0)  # type: ignore[arg-type]
    assert float(slip["drop_n"]) == pytest.approx(0.05 * 0.37 * 460.0, abs=1.0)  # type: ignore[arg-type]
    assert float(pop_in["load_n"]) == pytest.approx(0.55 * 460.0 + TOUCH_PLATEAU_N, abs=1.0)  # type: ignore[arg-type]
    assert float(pop_in["drop_n"]) == pytest.approx(0.12 * 0.55 * 460.0, abs=1.5)  # type: ignore[arg-type]
    assert float(pop_in["ratio"]) == pytest.approx(0.85, abs=0.03)  # type: ignore[arg-type]


def test_the_event_mix_at_ten_samples_a_second_is_called_once() -> None:
    outcome = run(mix(10.0, 1, 0))
    assert not outcome.failure, describe(outcome)
    found = counts(outcome)
    assert found["glitch"] == 3 and found["fracture"] == 1
    assert outcome.delay_s <= 0.350


# --- slips and pop-ins over many bars


def test_pop_ins_are_found_and_slips_are_not_taken_for_them() -> None:
    found = wrong = bars = 0
    for n in range(24):
        kind = "pop-in" if n % 2 else "slip"
        case = draw(n, kind, (100.0, 200.0, 1000.0)[n % 3], brief=False)
        case = Case(**{**{f: getattr(case, f) for f in case.__dataclass_fields__}, **_clear(case, kind)})
        names = counts(run(case))
        bars += 1
        expected, other = ("pop_in", "slip") if kind == "pop-in" else ("slip", "pop_in")
        found += names[expected] > 0
        wrong += names[other] > 0
    assert found >= 0.95 * bars
    assert wrong == 0


def _clear(case: Case, kind: str) -> dict[str, object]:
    """A drop of at least 10 sigma, with time left on both sides to tell the stiffness."""
    sigma = min(case.sigma_n, case.peak_n / 1000.0)
    if kind == "pop-in":
        return {"sigma_n": sigma, "pop_ins": ((0.5, 0.05, 0.85),)}
    return {"sigma_n": sigma, "slips": ((0.5, 0.05),)}
