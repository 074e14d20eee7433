"""Other bars, other rates, other remarks: rods and tubes, force and stress rates, ranges, event counts."""

import math

import numpy as np
import pytest

from daq.cards.load import load_frame, load_method
from daq.cards.series import Specimen
from daq.results.reduce import reduce
from daq.results.remarks import planned_rate_n_s
from daq.results.setup import setup_from_cards, setup_of
from daq.results.uncertainty import uncertainty_of
from daq.stream.rundata import RunData


@pytest.fixture(scope="module")
def cards(made):
    return load_frame(made.EXAMPLES / "kiln-lane-a.toml"), load_method(made.EXAMPLES / "alumina-bars.toml")


def with_section(cards, section: str, bar: Specimen, fixture: str = "quarter-40-20"):
    frame, method = cards
    return setup_of(frame, method.model_copy(update={"section": section}), bar, fixture)


def test_rod_and_tube_stress_and_budget(cards):
    """Relative sensitivities by finite differences of the stress itself."""
    rod = with_section(cards, "circle", Specimen(number="R", thickness_mm=(5.0, 5.02)))
    tube = with_section(cards, "tube", Specimen(number="T", thickness_mm=(10.0,), inner_diameter_mm=6.0))
    assert rod.stress_per_newton_mpa == pytest.approx(16.0 * 10.0 / (math.pi * 5.01**3), rel=1e-12)
    for setup, sizes in ((rod, (5.01,)), (tube, (10.0, 6.0))):
        found = uncertainty_of(setup, load_n=100.0, u_peak_n=0.0, u_tare_n=0.0, lag_known=True)
        shares = {part.name: part.share for part in found.contributors}
        gauge_mm = 0.005 / math.sqrt(3.0)
        scatter_mm = 0.01 if setup is rod else 0.0
        step_mm = 1e-6
        for place, name in enumerate(("diameter", "inner diameter")[: len(sizes)]):
            moved = list(sizes)
            moved[place] += step_mm
            bars = [
                Specimen(number="X", thickness_mm=(d[0],), inner_diameter_mm=d[1] if len(d) > 1 else 0.0)
                for d in (sizes, moved)
            ]
            section = "circle" if setup is rod else "tube"
            low, high = (with_section(cards, section, bar).stress_per_newton_mpa for bar in bars)
            slope = abs(high / low - 1.0) / step_mm
            u_mm = math.hypot(gauge_mm, scatter_mm if place == 0 else 0.0)
            assert shares[name] == pytest.approx(slope * u_mm, rel=1e-4)


def test_what_is_not_known_is_listed(cards):
    frame, method = cards
    bar = Specimen(number="A", width_mm=(4.0,), thickness_mm=(3.0,))
    setup = setup_of(None, method, bar, "")
    found = uncertainty_of(setup, load_n=100.0, u_peak_n=None, u_tare_n=math.nan, lag_known=False)
    assert {"force reading", "spans", "peak between samples", "tare", "lag of the force chain"} <= set(
        found.not_included
    )
    three = setup_of(frame, method, bar, "three-40")
    assert (
        "place of the break (three-point)"
        in uncertainty_of(three, load_n=1.0, u_peak_n=0.0, u_tare_n=0.0, lag_known=True).not_included
    )
    assert (
        uncertainty_of(setup_of(None, None, None, ""), load_n=1.0, u_peak_n=0, u_tare_n=0, lag_known=True)
        is None
    )


def test_sizes_that_cannot_be_are_named(made, cards):
    frame, method = cards
    no_width = setup_of(frame, method, Specimen(number="A", thickness_mm=(3.0,)), "quarter-40-20")
    assert no_width.section is None and "no width of the bar" in no_width.missing
    thick = with_section(cards, "tube", Specimen(number="T", thickness_mm=(6.0,), inner_diameter_mm=6.0))
    assert thick.section is None and "inner diameter" in thick.missing[0]
    other = setup_of(frame, method, Specimen(number="A", width_mm=(4.0,), thickness_mm=(3.0,)), "no-such")
    assert other.spans.load_mm == 20.0 and "no-such" in other.missing[0]
    spoiled = made.made_cards(made.Bar())
    spoiled["frame"]["compliance"]["points"][3]["force_n"] = 0.0
    assert setup_from_cards(spoiled).compliance is None


def test_planned_rate_of_every_mode(cards):
    frame, method = cards
    bar = Specimen(number="A", width_mm=(4.0,), thickness_mm=(3.0,))

    def planned(**rate):
        asked = method.model_copy(update={"rate": method.rate.model_copy(update=rate)})
        return planned_rate_n_s(setup_of(frame, asked, bar, "quarter-40-20"), asked)

    assert planned(mode="force", rate_n_s=50.0) == 50.0
    assert planned(mode="stress", rate_mpa_s=10.0) == pytest.approx(12.0, rel=1e-12)
    assert planned(mode="crosshead") == pytest.approx(0.5 / 60.0 / (1 / 5130.0 + 1 / 10e3), rel=1e-9)
    three = setup_of(frame, method, bar, "three-40")
    assert planned_rate_n_s(three, method) is None  # no compliance table for that fixture


def test_remarks_on_events_and_range(made):
    events = (
        *({"event": "slip", "at_s": 5.0 + i, "load_n": 150.0, "drop_n": 2.0} for i in range(4)),
        {"event": "partial_drop", "at_s": 10.0, "load_n": 290.0, "drop_n": 9.0},
        {"event": "second_break", "at_s": 16.5, "load_net_n": 200.0, "drop_n": 150.0},
    )
    bar = made.Bar(extra_events=events, frame_changes={"verified_min_n": 500.0, "verified_max_n": 900.0})
    codes = {remark.code for remark in reduce(made.made_run(bar, np.random.default_rng(1))).remarks}
    assert {"slips", "unclear drop", "two breaks", "outside the verified range"} <= codes


def test_run_without_a_tare_is_gross_and_says_so(made):
    run = made.made_run(made.Bar(tare_n=2.4), np.random.default_rng(1))
    events = tuple(event for event in run.events if event["event"] != "tared")
    result = reduce(RunData(run.channels, events, run.cards))
    assert result.loads.recovered.load_n == pytest.approx(462.4, rel=1e-3) and result.tare_n is None
    assert "no tare" in {remark.code for remark in result.remarks}


def test_noise_is_guessed_only_as_a_last_resort(made):
    run = made.made_run(made.Bar(sigma_n=0.5), np.random.default_rng(1))
    frame = {**run.cards["frame"], "cell": {**run.cards["frame"]["cell"], "noise_quiet_n": None}}
    events = tuple({k: v for k, v in event.items() if k != "sigma_n"} for event in run.events)
    result = reduce(RunData(run.channels, events, {**run.cards, "frame": frame}))
    assert result.loads.sigma_n == pytest.approx(0.5, rel=0.15)
