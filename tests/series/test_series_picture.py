"""The series picture: size, same bytes, what is marked, odd series; and the band of the Weibull plot."""

import struct
import sys

import numpy as np
import pytest

from daq.errors import MidspanError
from daq.results.reduce import reduce
from daq.series.band import fit_many, quantile_band_mpa
from daq.series.factors import pivotal_bounds
from daq.series.panels import weibull_words
from daq.series.picture import series_picture
from daq.series.sheet import ROWS_MAX, sheet_of
from daq.series.weibull import fit_weibull
from daq.stream.rundata import RunData


@pytest.fixture(scope="module")
def records(made):
    """Six bars at 100 S/s: five break, the last one survives."""
    rng = np.random.default_rng(3)
    made_records = []
    for place in range(6):
        peak_n = 480.0 * rng.weibull(12.0)
        bar = made.Bar(peak_n=peak_n, time_to_break_s=peak_n / 28.75 + 0.5, rate_hz=100.0, broken=place != 5)
        run = made.made_run(bar, rng)
        made_records.append((f"A-{place + 1:02d}", run, reduce(run).as_json()))
    return made_records


def real(records):
    """The same bars, said to come from a real frame."""
    changed = []
    for name, run, result in records:
        cards = {**run.cards, "frame": {**run.cards["frame"], "simulated": False}}
        changed.append((name, RunData(run.channels, run.events, cards), result))
    return changed


def texts(records) -> str:
    """Every word on the picture."""
    figure_module = pytest.importorskip("matplotlib.figure")
    from daq.series.picture import _compose

    figure = figure_module.Figure(figsize=(16, 9), dpi=100)
    _compose(figure, sheet_of(records, "a series"))
    import matplotlib.text

    return "\n".join(text.get_text() for text in figure.findobj(matplotlib.text.Text))


@pytest.mark.slow
def test_picture_has_its_size_and_the_same_bytes_twice(records, tmp_path):
    pytest.importorskip("matplotlib")
    first, second = tmp_path / "one.png", tmp_path / "two.png"
    series_picture(records, first, "a series")
    series_picture(records, str(second), "a series")
    head = first.read_bytes()[:24]
    assert head[:8] == b"\x89PNG\r\n\x1a\n" and struct.unpack(">II", head[16:24]) == (1600, 900)
    assert first.read_bytes() == second.read_bytes()


@pytest.mark.slow
def test_simulated_data_is_marked_and_real_data_is_not(records):
    assert "SIMULATED DATA" in texts(records)
    assert "SIMULATED" not in texts(real(records))
    unknown = [(name, RunData(run.channels, run.events, {}), result) for name, run, result in records]
    assert "SIMULATED DATA" in texts(unknown)


@pytest.mark.slow
def test_figures_on_the_picture(records):
    said = texts(records)
    for words in (
        "mean ± s",
        "did not break",
        "Weibull plot",
        "maximum likelihood, 5 breaks, 1 did not break",
        "A-01",
    ):
        assert words in said, words


@pytest.mark.slow
@pytest.mark.parametrize("count", [0, 1, 3])
def test_few_bars_have_no_weibull_estimate(records, count):
    assert "fewer than 5 breaks" in texts(records[:count])


@pytest.mark.slow
def test_odd_series_are_drawn_too(records):
    """No displacement; a bar without any sample; a result without numbers."""
    name, run, result = records[0]
    bare = (name, RunData({"force": run.channels["force"]}, run.events, run.cards), result)
    nothing = ("nothing", RunData({}, (), {}), {})
    assert "time from first load" in texts([bare, *records[1:]])
    texts([nothing, *records])
    texts([nothing])
    assert "A-01" in texts([*records[:5], (name, run, {})])


def test_missing_matplotlib_is_one_clear_line(records, tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "matplotlib", None)
    with pytest.raises(MidspanError, match="extra 'report'"):
        series_picture(records, tmp_path / "x.png", "a series")


def test_sheet_keeps_every_bar_and_fits_the_right_ones(records):
    sheet = sheet_of(records, "a series")
    assert [bar.name for bar in sheet.bars] == [name for name, _, _ in records]
    assert (sheet.fit.failed, sheet.fit.suspended, sheet.axis) == (5, 1, "strain")
    assert sheet.bounds.method == "profile likelihood" and sheet.unbiased is None
    assert all(len(bar.trace) <= ROWS_MAX for bar in sheet.bars)
    for bar in sheet.bars[:5]:
        assert bar.trace[:, 1].max() == pytest.approx(bar.strength_mpa, rel=5e-3)
        assert bar.trace[-1, 0] == pytest.approx(bar.strength_mpa / 380e3, rel=0.01)
    five = sheet_of(records[:5], "a series")
    assert five.bounds.method == "pivotal quantities" and "unbiased" in weibull_words(five)


def test_survivor_that_broke_in_a_later_loading_counts_once(records):
    """An interrupted loading of a bar that broke afterwards is no second bar."""
    again = (records[5][0], records[0][1], records[0][2])
    sheet = sheet_of([*records, again], "a series")
    assert (sheet.fit.failed, sheet.fit.suspended) == (6, 0)


def test_many_fits_are_the_same_as_one_by_one():
    samples = np.random.default_rng(1).weibull(1.0, (50, 12))
    modulus, log_scale = fit_many(np.log(samples))
    for row, m, s in zip(samples, modulus, log_scale, strict=True):
        fit = fit_weibull(row)
        assert (m, np.exp(s)) == (
            pytest.approx(fit.modulus, rel=1e-8),
            pytest.approx(fit.scale_mpa, rel=1e-8),
        )


def test_band_meets_the_bounds_of_the_scale():
    """At P = 1 - 1/e the stress is the scale, whose bounds come from the table."""
    strengths = 400.0 * np.random.default_rng(2).weibull(12.0, 30)
    fit = fit_weibull(strengths)
    low, high = quantile_band_mpa(fit, np.array([0.01, 1.0 - np.exp(-1.0), 0.99]), np.random.default_rng(3))
    bounds = pivotal_bounds(fit, 0.90).scale_mpa
    assert (low[1], high[1]) == (pytest.approx(bounds.low, rel=2e-3), pytest.approx(bounds.high, rel=2e-3))
    assert np.all(low < [fit.quantile_mpa(p) for p in (0.01, 1 - np.exp(-1), 0.99)])
    assert (
        quantile_band_mpa(fit_weibull(strengths, [500.0]), np.array([0.5]), np.random.default_rng(3)) is None
    )
