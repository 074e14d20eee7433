"""The online reduction: agrees with the record's reduction, with numpy, and with itself however the
stream is cut.
"""

import time
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.cards.load import load_frame, load_method
from daq.cards.series import Specimen
from daq.results.expected import band_of, planned_quantile_mpa
from daq.results.live import WindowSlope
from daq.results.moments import Moments, merge, moments_of
from daq.results.online import OnlineReduction
from daq.results.reduce import reduce

SPECIMEN = Specimen(number="A01", width_mm=(4.0, 4.0, 4.0), thickness_mm=(3.0, 3.0, 3.0))


@pytest.fixture(scope="module")
def cards(made):
    return load_frame(made.EXAMPLES / "kiln-lane-a.toml"), load_method(made.EXAMPLES / "alumina-bars.toml")


@pytest.fixture(scope="module")
def alumina(made):
    return made.made_run(made.Bar(quantum_n=0.016), np.random.default_rng(1))


def play(cards, run, edges, until_s=np.inf):
    """Feed a run in blocks that end at these sample numbers, with its events in between."""
    online = OnlineReduction(*cards, SPECIMEN, "quarter-40-20")
    force, along = run.channels["force"], run.channels["crosshead"]
    events = [event for event in run.events if event["event"] in ("tared", "seated", "fracture")]
    tables = []
    bounds = [0, *edges, len(force.time_s)]
    bounds += [int(np.searchsorted(force.time_s, event["time_s"])) for event in events]
    bounds.append(int(np.searchsorted(force.time_s, until_s)))
    for start, end in pairwise(np.unique(bounds).tolist()):
        while events and force.time_s[start] >= events[0]["time_s"]:
            event = events.pop(0)
            if event["event"] == "tared":
                online.tare(event["tare_n"])
            elif event["event"] == "seated":
                online.seated(0.0)
            else:
                online.broken()
        if force.time_s[start] >= until_s:
            break
        tables.append(online.feed(force.time_s[start:end], force.value[start:end], along.value[start:end]))
    return online, np.concatenate(tables)


def test_agrees_with_the_reduction_of_the_record(cards, alumina, made):
    online, table = play(cards, alumina, range(0, 19000, 30), until_s=made.REST_S + 15.9)
    now, after = online.summary(), reduce(alumina)
    assert now["stress_rate_mpa_s"] == pytest.approx(460.0 / 15.5 / 1.2, rel=2e-3)
    assert now["stiffness_n_mm"] == pytest.approx(after.modulus.stiffness_n_mm, rel=2e-3)
    assert now["stiffness_of_expected"] == pytest.approx(1.0, rel=2e-3)
    assert now["stiffness_2sigma_percent"] < 0.1
    row = table[np.searchsorted(table[:, 0], made.REST_S + 15.0)]
    assert row[1] == pytest.approx(460.0 / 15.5 * 14.5 / 1.2, abs=0.5)
    assert row[4] == pytest.approx(row[1] / 380e3, rel=2e-3)
    assert now["highest_n"] == pytest.approx(460.0, rel=0.01)


def test_percent_band_and_seconds_to_it(cards, alumina, made):
    online, _ = play(cards, alumina, range(0, 19000, 30), until_s=made.REST_S + 8.0)
    now = online.summary()
    assert now["expected_n"] == pytest.approx(387.7 * 1.2, rel=2e-3)  # median of mean 383, m 12
    assert now["expected_percent"] == pytest.approx(100.0 * now["net_n"] / now["expected_n"], rel=1e-12)
    assert now["in_band"] is False and now["band_from_bars"] is False
    seconds = (now["band_low_n"] - now["net_n"]) / now["force_rate_n_s"]
    assert now["to_band_s"] == pytest.approx(seconds, rel=1e-9)
    late, _ = play(cards, alumina, [], until_s=made.REST_S + 15.9)
    assert late.summary()["in_band"] is True


def test_after_the_break_rates_are_gone_and_stiffness_stays(cards, alumina):
    online, _ = play(cards, alumina, range(0, 19000, 30))
    now = online.summary()
    assert now["force_rate_n_s"] is None and now["stiffness_n_mm"] == pytest.approx(5130.0, rel=5e-3)


def test_any_cut_of_the_stream_gives_the_same_numbers(cards, alumina):
    rng = np.random.default_rng(11)
    whole_online, whole = play(cards, alumina, [])
    for pieces in (19, 400):
        edges = np.sort(rng.choice(np.arange(1, 18999), pieces, replace=False))
        online, table = play(cards, alumina, edges)
        np.testing.assert_allclose(table, whole, rtol=1e-12, atol=0.0)
        for name, value in whole_online.summary().items():
            assert online.summary()[name] == (value if value is None else pytest.approx(value, rel=1e-9)), (
                name
            )


def test_holes_in_force_and_displacement_do_no_harm(cards, alumina):
    online, _ = play(cards, alumina, range(0, 19000, 30), until_s=12.0)
    nothing = np.full(3, np.nan)
    row = online.feed(np.array([12.1, 12.101, 12.102]), nothing, nothing)
    assert np.isnan(row[:, 1:]).all()
    assert online.feed(np.empty(0), np.empty(0), np.empty(0)).shape == (0, 5)
    assert online.summary()["net_n"] is not None


def test_nothing_yet_is_none_and_not_zero(cards):
    now = OnlineReduction(*cards, SPECIMEN, "quarter-40-20").summary()
    assert now["net_n"] is None and now["stress_rate_mpa_s"] is None and now["stiffness_n_mm"] is None
    assert now["expected_n"] > 0


def test_band_from_the_bars_so_far(cards):
    bars = [380.0, 400.0, 390.0, 410.0, 370.0]
    band = band_of(cards[1], bars)
    assert band.from_bars and band.median_mpa == pytest.approx(390.0)
    assert not band_of(cards[1], bars[:4]).from_bars
    assert planned_quantile_mpa(cards[1], 0.001) * 1.2 == pytest.approx(270.0, abs=0.5)  # computed beforehand
    assert planned_quantile_mpa(cards[1], 0.999) * 1.2 == pytest.approx(564.0, abs=0.6)


@settings(max_examples=60, deadline=None)
@given(st.lists(st.integers(1, 30), min_size=1, max_size=12), st.integers(0, 2**32 - 1))
def test_moments_of_pieces_are_moments_of_the_whole(sizes, seed):
    rng = np.random.default_rng(seed)
    x, y = 1e3 + rng.random(sum(sizes)), rng.random(sum(sizes))
    whole, pieces, at = moments_of(x, y), Moments(), 0
    for size in sizes:
        pieces = merge(pieces, moments_of(x[at : at + size], y[at : at + size]))
        at += size
    for name in ("count", "mean_x", "mean_y", "sum_xx", "sum_xy", "sum_yy"):
        assert getattr(pieces, name) == pytest.approx(getattr(whole, name), rel=1e-9, abs=1e-11)


def test_slope_and_its_error_agree_with_numpy():
    rng = np.random.default_rng(3)
    x = rng.random(50)
    y = 2.0 * x + 0.1 * rng.standard_normal(50)
    coefficients, covariance = np.polyfit(x, y, 1, cov=True)
    found = moments_of(x, y)
    assert (found.slope, found.u_slope) == (
        pytest.approx(coefficients[0]),
        pytest.approx(np.sqrt(covariance[0, 0])),
    )


def test_window_slope_forgets_what_is_older_than_half_a_second():
    slope = WindowSlope()
    time_s = np.arange(0.0, 4.0, 0.001)
    slope.feed(time_s, np.where(time_s < 2.0, 100.0 * time_s, 200.0 + 7.0 * (time_s - 2.0)))
    assert slope.slope == pytest.approx(7.0, rel=1e-9)


@pytest.mark.slow
def test_cost_does_not_grow_with_the_run(cards, made):
    """A block of 20 ms at 1 kHz late in a long run costs what it cost early: the best of many, within
    a factor.
    """
    online = OnlineReduction(*cards, SPECIMEN, "quarter-40-20")
    online.tare(0.0)
    online.seated(0.0)
    best = {}
    for place in range(3000):
        time_s = place * 0.02 + np.arange(20) * 0.001
        started = time.perf_counter()
        online.feed(time_s, 5.0 * time_s, 0.001 * time_s)
        best.setdefault(place // 1000, []).append(time.perf_counter() - started)
    assert min(best[2]) < 2.0 * min(best[0])
