"""The small judges one by one: seating, drops, envelope, expected numbers, pace, travel, stop check, level."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest

from daq.watch.drops import Drop, stiffness_ratio, tell
from daq.watch.drops import window_s as drop_window_s
from daq.watch.envelope import Gate, usable
from daq.watch.expected import expect, in_series, weibull_quantile
from daq.watch.motion import approach_mm_min, touch_n
from daq.watch.noise import Level
from daq.watch.pace import Pace
from daq.watch.seating import Seated, Seating, seating_window_s, slope_u_n_s
from daq.watch.setup import run_setup, setup_from_card
from daq.watch.stopping import Force, Outcome, StopCheck
from daq.watch.travel import Travel
from tests.watch.frames import frame, method, open_run

# --- expected numbers


def test_the_plan_of_the_alumina_bar() -> None:
    """Worked example: 460 N mean, P0.1 270 and P99.9 564 N, 23.6 MPa/s, 16.3 s, 136 um of travel."""
    plan = run_setup(setup_from_card(frame()), open_run())
    assert not isinstance(plan, tuple)
    expected = plan.expected
    assert expected.load_per_stress_n_mpa * 383.0 == pytest.approx(460.0, abs=1.0)
    assert expected.load_p999_n == pytest.approx(564.0, abs=1.5)
    assert weibull_quantile(459.6, 12.0, 0.001) == pytest.approx(270.0, abs=1.0)
    assert expected.rate_n_s / expected.load_per_stress_n_mpa == pytest.approx(23.6, abs=0.1)
    assert expected.time_to_break_s == pytest.approx(16.3, rel=0.02)
    assert expected.deflection_mm == pytest.approx(0.136, rel=0.02)


@pytest.mark.parametrize(("span_mm", "fits"), [(40.3, True), (39.7, True), (40.5, False), (39.5, False)])
def test_spans_agree_within_the_one_per_cent_of_the_cards(span_mm: float, fits: bool) -> None:
    plan = run_setup(setup_from_card(frame(fixtures__0__support_span_mm=span_mm)), open_run())
    assert isinstance(plan, tuple) is not fits
    if isinstance(plan, tuple):
        assert plan == (f"support span: method 40 mm, fixture {span_mm:g} mm",)


@pytest.mark.parametrize(("speed_max", "fits"), [(0.55, True), (0.45, False)])
def test_a_rate_that_the_drive_cannot_hold_on_this_bar_is_refused_with_the_sum(
    speed_max: float, fits: bool
) -> None:
    """23.57 MPa/s on the 4 x 3 bar is 0.5 mm/min against a frame of 10 kN/mm."""
    stress = method(rate={"mode": "stress", "rate_mpa_s": 23.57, "loop": "midspan"})
    plan = run_setup(
        setup_from_card(frame(motion__speed_mm_min_max=speed_max, motion__approach_mm_min=0.4)),
        open_run(stress),
    )
    assert isinstance(plan, tuple) is not fits
    if isinstance(plan, tuple):
        assert "28.28 N/s / 3391 N/mm x 60" in plan[0] and "is outside 0.01..0.45 mm/min" in plan[0], plan


@pytest.mark.parametrize(("m", "ratio"), [(5, 1.60), (8, 1.35), (10, 1.28), (12, 1.23), (15, 1.18)])
def test_the_highest_of_a_thousand(m: float, ratio: float) -> None:
    """Ratios of row 4 (no break where expected), computed beforehand from the Weibull distribution."""
    assert weibull_quantile(1.0, m, 0.999) == pytest.approx(ratio, abs=0.005)


def test_rates_follow_from_each_other() -> None:
    setup = setup_from_card(frame())
    by_speed = run_setup(setup, open_run())
    assert not isinstance(by_speed, tuple)
    stress = method(rate={"mode": "stress", "rate_mpa_s": 23.57, "loop": "midspan"})
    fixture, specimen = by_speed.fixture, by_speed.specimen
    by_stress = expect(stress, specimen, fixture, None, 10_000.0)
    assert by_stress.speed_mm_min == pytest.approx(0.5, rel=0.01)
    assert in_series(5130.0, None) == 5130.0


# --- seating


def seat(force: object, seconds: float, *, sigma: float = 0.15, seed: int = 0) -> list[tuple[float, object]]:
    window = seating_window_s(1000.0, sigma, 28.0, 16.0)
    seating = Seating(
        window_s=window,
        sigma_n=sigma,
        load_p50_n=460.0,
        speed_mm_s=0.5 / 60.0,
        contact_mm=0.0,
        slope_u_n_s=slope_u_n_s(1000.0, sigma, window),
    )
    rng, told = np.random.default_rng(seed), []
    for n in range(round(seconds / 0.006)):
        t = n * 0.006
        found = seating.feed(t, force(t) + sigma / math.sqrt(6) * rng.standard_normal(), t * 0.5 / 60.0)  # type: ignore[operator]
        if found is not None:
            told.append((t, found))
    return told


def test_a_toe_of_a_second_is_seated_soon_after_it() -> None:
    def force(t: float) -> float:
        return 14.0 * t * t if t < 1.0 else 14.0 + 28.0 * (t - 1.0)

    told = seat(force, 4.0)
    assert len(told) == 1
    at, seated = told[0]
    assert isinstance(seated, Seated) and 1.0 < at < 2.6
    assert seated.toe_offset_mm == pytest.approx(0.5 * 0.5 / 60.0, abs=0.0005)


def test_a_stiffness_that_never_settles_is_told_at_half_the_load() -> None:
    told = seat(lambda t: 4.0 * math.exp(0.6 * t), 7.5)
    assert [word for _, word in told] == ["not steady at half the expected break load"]


def test_noise_alone_is_not_called_uneven_seating() -> None:
    """Peak over noise of 160: one bar in four was cautioned when any two noisy slopes could do it."""
    told = [word for seed in range(40) for _, word in seat(lambda t: 28.0 * t, 16.0, sigma=2.8, seed=seed)]
    assert [word for word in told if not isinstance(word, Seated)] == []
    assert len(told) == 40


def test_twist_that_settles_late_is_told() -> None:
    def force(t: float) -> float:
        return 28.0 * t if t < 9.5 else 28.0 * 9.5 + 36.0 * (t - 9.5)

    words = [word for _, word in seat(force, 13.0)]
    assert words[1:] == ["stiffness still rises late"]


# --- slip or pop-in


DROP = Drop(onset_s=1.0, settled_s=1.05, load_n=200.0, drop_n=10.0, slope_before_n_s=28.3, until_s=1.3)


@pytest.mark.parametrize(
    ("ratio", "kind"),
    [
        (1.0, "slip"),
        (0.975, "slip"),
        (1.029, "slip"),
        (0.96, "partial_drop"),
        (0.95, "pop_in"),
        (0.7, "pop_in"),
    ],
)
def test_the_word_follows_the_ratio(ratio: float, kind: str) -> None:
    assert tell(DROP, 28.0, ratio).kind == kind


def test_a_break_before_the_window_is_over_leaves_it_unclear() -> None:
    assert tell(DROP, None, None).why == "too short after it"


def test_the_machine_is_taken_out_of_the_stiffness() -> None:
    """First principles: 5 % of the bar shows as 3.3 % in series of 5.1 and 10 kN/mm."""
    speed = 0.5 / 60.0
    before, after = (speed * in_series(k, 10_000.0) for k in (5100.0, 0.95 * 5100.0))
    assert after / before == pytest.approx(1 - 0.033, abs=0.002)
    assert stiffness_ratio(before, after, speed, 10_000.0) == pytest.approx(0.95, abs=1e-9)
    assert stiffness_ratio(before, after, None, None) == pytest.approx(after / before)


def test_the_window_of_the_reference() -> None:
    """The same formula gives 0.42 s at 100 S/s, 0.3 N, 33 N/s for e = 5 %; here e is half of it."""
    assert drop_window_s(100.0, 0.3, 33.0) == pytest.approx(0.42 * 2 ** (2 / 3), rel=0.03)
    assert drop_window_s(10.0, 5.0, 33.0) == 3.0  # bounded


# --- the usable envelope


def statement(**changes: float | None) -> object:
    plan: dict[str, float | None] = {
        "peak_n": 460.0,
        "sigma_n": 0.15,
        "rate_hz": 1000.0,
        "time_to_break_s": 16.0,
        "lag_s": 0.0,
        "arm_n": 20.0,
    }
    return usable(**{**plan, **changes})  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("changes", "detects"),
    [
        ({}, True),
        ({"sigma_n": 4.7}, False),
        ({"sigma_n": 4.5}, True),
        ({"rate_hz": 3.0}, False),
        ({"lag_s": 0.33}, False),
        ({"lag_s": 0.31}, True),
        ({"lag_s": None}, True),
        ({"arm_n": 240.0}, False),
    ],
)
def test_what_can_be_seen(changes: dict[str, float | None], detects: bool) -> None:
    assert statement(**changes).detects is detects  # type: ignore[attr-defined]


@pytest.mark.parametrize(
    ("changes", "gate"),
    [
        ({}, Gate.GREEN),
        ({"lag_s": None}, Gate.LAG_UNKNOWN),
        ({"lag_s": 0.05}, Gate.CAUTION),
        ({"time_to_break_s": 1.0, "lag_s": 0.08}, Gate.BLOCK),  # scenario 2: 8 %
    ],
)
def test_the_sampling_gate(changes: dict[str, float | None], gate: Gate) -> None:
    assert statement(**changes).gate is gate  # type: ignore[attr-defined]


# --- approach


def test_the_approach_limit_of_the_reference() -> None:
    """Computed beforehand: 1 kN, 20 kN/mm, 150 ms, touch 3 N: 9.9 mm/min."""
    motion = frame(motion__blocked_stiffness_n_mm=20_000.0).motion
    assert motion is not None
    assert touch_n(1000.0, 0.15) == 3.0
    assert approach_mm_min(motion, 1000.0, 3.0, 0.0) == pytest.approx(9.94, abs=0.01)


# --- pace


def pace_over(slope: object, wanted: float | None, *, seconds: float = 8.0) -> list[str]:
    pace, told, force = Pace(wanted, 0.2, 0.15, 1000.0), [], 0.0
    level = Level(1000.0, 0.15)
    for n in range(round(seconds / 0.006)):
        t = n * 0.006
        force += slope(t) * 0.006  # type: ignore[operator]
        level.history.append((t, force))
        found = pace.judge(t, 0.0, level.history)
        if found is not None:
            told.append(found.event)
    return told


def test_a_rate_out_of_its_band_is_told_after_a_second() -> None:
    assert pace_over(lambda t: 50.0, 50.0) == []
    assert pace_over(lambda t: 59.0, 50.0) == []
    assert pace_over(lambda t: 65.0, 50.0) == ["rate_out_of_band"]
    assert pace_over(lambda t: 65.0 if 3 < t < 3.4 else 50.0, 50.0) == []


def test_a_hold_of_the_drive_is_told_with_its_length() -> None:
    assert pace_over(lambda t: 0.0 if 3 < t < 5 else 28.0, None) == ["rate_interrupted"]
    assert pace_over(lambda t: 28.0, None) == []


def test_the_loop_corrects_in_small_steps() -> None:
    pace = Pace(50.0, 0.2, 0.15, 1000.0)
    pace.rate_n_s = 25.0
    assert pace.speed_factor(1.0) == 1.25
    assert pace.speed_factor(1.1) is None  # not before the slope has had time to follow
    pace.rate_n_s = 50.2
    assert pace.speed_factor(2.0) is None


# --- stop check


def stopping(
    speed_mm_s: float,
    latency_s: float,
    resolution_mm: float = 1e-4,
    noise_mm: float = 0.0,
    seconds: float = 2.0,
    force_at: Callable[[float], Force] = lambda t: Force(0.0, 1.0),
) -> dict[str, float]:
    """A crosshead that stands after that latency; when each outcome was seen."""
    travel, rng = Travel(1000.0, resolution_mm), np.random.default_rng(0)
    seen: dict[str, float] = {}
    check: StopCheck | None = None
    for n in range(1000 + round(1000 * seconds)):
        t = n * 0.001
        way = speed_mm_s * min(t, 1.0 + latency_s) + noise_mm * rng.standard_normal()
        travel.feed(t, round(way / resolution_mm) * resolution_mm)
        if n == 1000:
            check = StopCheck("test", t, speed_mm_s=speed_mm_s, latency_s=0.15, travel=travel)
        if check is not None and n % 6 == 0:
            look = check.look(t, travel, None, force_at(t))
            if look.outcome is not None:
                seen.setdefault(look.outcome.value, t - 1.0)
            if look.outcome in (Outcome.STANDS, Outcome.BLIND):
                break
    return seen


@pytest.mark.parametrize("speed_mm_min", [0.1, 0.5, 5.0, 50.0])
@pytest.mark.parametrize("resolution_mm", [1e-5, 1e-4, 1e-3])
def test_a_stop_is_seen_and_never_doubted(speed_mm_min: float, resolution_mm: float) -> None:
    """Within 0.6 s where the position can show it; else as soon as it can, or it is said that it cannot be seen."""
    seen = stopping(speed_mm_min / 60.0, 0.15, resolution_mm, seconds=4.0)
    needed_s = 12.5 * resolution_mm / (speed_mm_min / 60.0)  # 2.5 steps at a fifth of the set speed
    if needed_s <= 2.8:
        assert list(seen) == [Outcome.STANDS.value]
        assert seen[Outcome.STANDS.value] <= max(0.6, 0.45 + needed_s)
    else:
        assert list(seen) == [Outcome.BLIND.value]


@pytest.mark.parametrize("resolution_mm", [1e-5, 1e-4, 1e-3, 1e-2])
@pytest.mark.parametrize("speed_mm_min", [0.05, 0.1, 0.5])
@pytest.mark.parametrize("share", [0.3, 1.0])
def test_a_crosshead_that_creeps_on_is_never_said_to_stand(
    speed_mm_min: float, share: float, resolution_mm: float
) -> None:
    """At the set speed or a third of it: failed where the position can show it, else not seen. Row 26."""
    speed_mm_s = speed_mm_min / 60.0
    travel, seen = Travel(1000.0, resolution_mm), []
    check: StopCheck | None = None
    for n in range(0, 5000, 5):
        t = n * 0.001
        way = speed_mm_s * min(t, 1.0) + share * speed_mm_s * max(t - 1.0, 0.0)
        travel.feed(t, round(way / resolution_mm) * resolution_mm)
        if n == 1000:
            check = StopCheck("test", t, speed_mm_s=speed_mm_s, latency_s=0.15, travel=travel)
        look = check.look(t, travel, None, Force(0.0, 1.0)) if check is not None else None
        if look is not None and look.outcome is not None:
            seen.append(look.outcome)
            if look.outcome is not Outcome.FAILED:
                break
    assert Outcome.STANDS not in seen
    steps_in_two_seconds = share * speed_mm_s * 2.0 / resolution_mm
    if steps_in_two_seconds > 4.0:
        assert seen[0] is Outcome.FAILED


def test_the_force_shows_a_standstill_that_the_position_cannot() -> None:
    """0.1 mm/min, steps of 1 um: on a bar of 3 kN/mm a creep would show in the force; a creep that does, does not."""
    speed_mm_s, stiffness = 0.1 / 60.0, 3000.0

    def standing(t: float) -> Force:
        return Force(200.0 + 0.04 * math.sin(37.0 * t), 10.0, 0.05, stiffness)

    def creeping(t: float) -> Force:
        return Force(200.0 + 0.25 * speed_mm_s * stiffness * (t - 1.0), 10.0, 0.05, stiffness)

    seen = stopping(speed_mm_s, 0.15, 1e-3, seconds=4.0, force_at=standing)
    assert list(seen) == [Outcome.STANDS.value] and seen[Outcome.STANDS.value] < 1.5
    assert list(stopping(speed_mm_s, 0.15, 1e-3, seconds=4.0, force_at=creeping)) == [Outcome.BLIND.value]


@pytest.mark.parametrize("speed_mm_min", [0.5, 5.0, 50.0])
def test_a_failed_stop_is_seen_within_half_a_second(speed_mm_min: float) -> None:
    seen = stopping(speed_mm_min / 60.0, 10.0)
    assert list(seen) == [Outcome.FAILED.value]
    assert seen[Outcome.FAILED.value] <= 0.5


def test_a_force_that_still_rises_is_a_failed_stop() -> None:
    travel = Travel(1000.0, 1e-4)
    check = StopCheck("test", 0.0, speed_mm_s=0.01, latency_s=0.15, travel=None)
    outcomes = [check.look(n * 0.01, None, None, Force(100.0 + n * 0.3, 2.0)).outcome for n in range(60)]
    assert Outcome.FAILED in outcomes
    assert travel.speed_mm_s(0.1) is None


def test_a_force_that_has_risen_and_stays_is_no_longer_said_to_rise() -> None:
    """A run-on after the first look: told once, and then the crosshead is seen to stand."""
    rising = StopCheck("test", 0.0, speed_mm_s=0.01, latency_s=0.15, travel=None)
    forces = [Force(min(100.0 + n * 0.3, 116.0), 2.0) for n in range(120)]
    looks = [rising.look(n * 0.01, None, True, force).outcome for n, force in enumerate(forces)]
    assert looks.count(Outcome.FAILED) == 1
    assert rising.look(1.3, None, False, Force(116.0, 2.0)).outcome is Outcome.STANDS


def test_a_force_seen_late_at_a_low_rate_is_no_failed_stop() -> None:
    """10 S/s: what is at hand when the crosshead stands was sampled while it moved (480 N/s onto the bar)."""
    check = StopCheck("test", 0.0, speed_mm_s=0.083, latency_s=0.1, travel=None, force_age_s=0.2)
    for n in range(100):
        sampled_s = (n // 10) * 0.1 - 0.1
        force_n = 50.0 + 480.0 * min(max(sampled_s, 0.0), 0.15)
        look = check.look(n * 0.01, None, None, Force(force_n, 10.0))
        assert look.outcome is not Outcome.FAILED, n
        if look.outcome is not None:
            break


# --- the level


def test_the_noise_is_what_it_is_and_never_below_the_one_at_rest() -> None:
    rng = np.random.default_rng(0)
    for rate_hz in (10.0, 100.0, 1000.0, 20_000.0):
        level = Level(rate_hz, 0.1)
        for n in range(round(3 * max(rate_hz, 60.0))):
            t = n / rate_hz
            x = 28.0 * t + 0.5 * rng.standard_normal()
            level.add(t, x, x - level.forecast(t))
        assert level.sigma_n == pytest.approx(0.5, rel=0.35)
        assert level.slope_n_s == pytest.approx(28.0, abs=8.0)
    quiet = Level(1000.0, 0.4)
    for n in range(2000):
        quiet.add(n / 1000.0, 1e-3 * rng.standard_normal(), 1e-3)
    assert quiet.sigma_n == 0.4


def test_hum_is_part_of_the_noise() -> None:
    """Second differences saw the white noise only, and called the hum partial drops."""
    level = Level(1000.0, 0.05)
    for n in range(2000):
        t = n / 1000.0
        x = 2.0 * math.sin(2 * math.pi * 50.0 * t)
        level.add(t, x, x - level.forecast(t))
    assert level.sigma_n > 1.5
