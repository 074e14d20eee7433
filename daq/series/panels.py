"""The three panels of the series picture: traces, strengths in order, Weibull plot. Given axes, they draw;
no files.

Colours are of the Okabe-Ito set; every difference is also one of mark, line style, place or word.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from daq.mechanics.quantity import Floats
from daq.series.band import quantile_band_mpa
from daq.series.ranks import suspended_positions
from daq.series.sheet import LEVEL, BarRow, SeriesSheet

if TYPE_CHECKING:
    from matplotlib.axes import Axes

BLUE, ORANGE, VERMILION, GREEN, GREY, INK = "#0072B2", "#E69F00", "#D55E00", "#009E73", "#8A8A8A", "#222222"
LABELS_MAX = 10
TICKS_MAX = 15
CHARACTERS_MAX = 90  # of all names under one panel before they are slanted
SURVIVED = "did not break"
AXIS_WORDS = {
    "strain": ("outer-fibre strain, %", 100.0),
    "deflection_mm": ("displacement, µm", 1000.0),
    "time_s": ("time from first load, s", 1.0),
}
PERCENTS = (0.1, 0.5, 1, 2, 5, 10, 20, 50, 80, 90, 95, 99, 99.9)
BAND_SEED = 20240611  # the same bars give the same picture


def draw_traces(axes: Axes, sheet: SeriesSheet) -> None:
    """Stress of every bar up to its end; cross: break, open triangle: survived."""
    words, factor = AXIS_WORDS[sheet.axis]
    for bar in sheet.bars:
        if bar.trace.size:
            axes.plot(bar.trace[:, 0] * factor, bar.trace[:, 1], color=BLUE, linewidth=1.0, alpha=0.55)
    _ends(axes, sheet, factor)
    axes.set_xlabel(f"{words}  ({sheet.source})" if sheet.source and sheet.axis != "time_s" else words)
    axes.set_ylabel("nominal stress, MPa")
    axes.set_title("Traces to the break", loc="left")
    axes.set_xlim(left=min(0.0, axes.get_xlim()[0]), right=axes.get_xlim()[1] * 1.06)
    axes.set_ylim(bottom=0.0, top=axes.get_ylim()[1] * 1.03)
    if axes.get_legend_handles_labels()[0]:
        axes.legend(loc="upper left", frameon=False)


def _ends(axes: Axes, sheet: SeriesSheet, factor: float) -> None:
    ends = [(bar, bar.trace[int(np.argmax(bar.trace[:, 1]))]) for bar in sheet.bars if bar.trace.size]
    broken = [(at[0] * factor, bar.strength_mpa) for bar, at in ends if bar.strength_mpa is not None]
    alive = [(at[0] * factor, at[1]) for bar, at in ends if bar.strength_mpa is None]
    if broken:
        axes.plot(
            *zip(*broken, strict=True), "x", color=VERMILION, markersize=8, markeredgewidth=1.8, label="break"
        )
    if alive:
        axes.plot(
            *zip(*alive, strict=True),
            "^",
            color=INK,
            markerfacecolor="none",
            markersize=9,
            label=SURVIVED,
        )
    chosen = ends if len(ends) <= LABELS_MAX else _extremes(ends)
    _labels(axes, [(bar.name, at[0] * factor, _height(bar, at)) for bar, at in chosen])


def _height(bar: BarRow, at: Floats) -> float:
    return float(at[1]) if bar.strength_mpa is None else bar.strength_mpa


def _extremes(ends: Sequence[tuple[BarRow, Floats]]) -> list[tuple[BarRow, Floats]]:
    """Weakest and strongest bar."""
    ordered = sorted(ends, key=lambda end: _height(*end))
    return [ordered[0], ordered[-1]]


def _labels(axes: Axes, labels: Sequence[tuple[str, float, float]]) -> None:
    """Names right of their ends, pushed apart where they would overlap."""
    low, high = axes.get_ylim()
    step = 0.032 * (high - low)
    free = -math.inf
    x_right = max((x for _, x, _ in labels), default=0.0)
    for name, x, y in sorted(labels, key=lambda label: label[2]):
        free = max(y, free + step)
        axes.annotate(
            name,
            (x, y),
            xytext=(x_right * 1.03, free),
            fontsize=9,
            color=INK,
            va="center",
            arrowprops={"arrowstyle": "-", "color": GREY, "linewidth": 0.6, "shrinkA": 1, "shrinkB": 5},
        )


def draw_order(axes: Axes, sheet: SeriesSheet) -> None:
    """Strengths in firing order with their k = 2 bars, mean and standard deviation."""
    rows = list(enumerate(sheet.bars, start=1))
    _strengths(axes, [row for row in rows if not row[1].remarks], "o", BLUE, "strength, k = 2")
    _strengths(axes, [row for row in rows if row[1].remarks], "s", "white", "with remark")
    alive = [
        (place, bar.survived_mpa) for place, bar in rows if bar.strength_mpa is None and bar.survived_mpa
    ]
    if alive:
        axes.plot(
            *zip(*alive, strict=True), "^", color=INK, markerfacecolor="none", markersize=8, label=SURVIVED
        )
    _mean(axes, sheet)
    low, high = axes.get_ylim()
    axes.set_ylim(low - 0.04 * (high - low), high + 0.22 * (high - low))
    axes.set_xlim(0.4, max(len(rows), 1) + 0.6)
    step = max(1, math.ceil(len(rows) / TICKS_MAX))
    names = [bar.name for bar in sheet.bars][::step]
    slanted = sum(map(len, names)) > CHARACTERS_MAX
    axes.set_xticks([place for place, _ in rows][::step], names, fontsize=9)
    axes.tick_params("x", labelrotation=30.0 if slanted else 0.0)
    axes.set_ylabel("strength, MPa")
    axes.set_title("Strengths in order", loc="left")
    if axes.get_legend_handles_labels()[0]:
        axes.legend(
            loc="upper center", ncol=4, frameon=False, fontsize=10, columnspacing=1.4, handletextpad=0.5
        )


def _strengths(axes: Axes, rows: Sequence[tuple[int, BarRow]], mark: str, face: str, words: str) -> None:
    broken = [
        (place, bar.strength_mpa, bar.u_k2_mpa or 0.0) for place, bar in rows if bar.strength_mpa is not None
    ]
    if not broken:
        return
    places, strengths, spreads = zip(*broken, strict=True)
    axes.errorbar(
        places, strengths, yerr=spreads, fmt=mark, label=words,
        color=BLUE, markerfacecolor=face, markersize=6, capsize=2, elinewidth=1.0,
    )  # fmt: skip


def _mean(axes: Axes, sheet: SeriesSheet) -> None:
    summary = sheet.summary
    if summary is None:
        return
    words = "mean"
    if summary.spread_mpa is not None:
        words = "mean ± s"
        low, high = (summary.mean_mpa + sign * summary.spread_mpa for sign in (-1.0, 1.0))
        axes.axhspan(low, high, color=ORANGE, alpha=0.15, linewidth=0)
    axes.axhline(summary.mean_mpa, color=ORANGE, linestyle="--", linewidth=1.8, label=words)


def draw_weibull(axes: Axes, sheet: SeriesSheet) -> None:
    """Points at (i-0.5)/n, the maximum-likelihood line, and its 90 % bounds."""
    fit = sheet.fit
    assert fit is not None
    stresses = [*sheet.strengths_mpa, *sheet.survived_mpa]
    broke = [True] * len(sheet.strengths_mpa) + [False] * len(sheet.survived_mpa)
    points, places = suspended_positions(stresses, broke)
    lowest = min(0.02, 0.4 / len(stresses))
    grid = -np.expm1(-np.exp(np.linspace(_height_of(lowest), _height_of(0.995), 120)))
    band = quantile_band_mpa(fit, grid, np.random.default_rng(BAND_SEED), LEVEL)
    if band is not None:
        axes.fill_betweenx(_heights(grid), *band, color=BLUE, alpha=0.12, linewidth=0, label="90 % bounds")
        for edge in band:
            axes.plot(edge, _heights(grid), color=BLUE, linewidth=0.9, linestyle=":")
    line = fit.scale_mpa * (-np.log1p(-grid)) ** (1.0 / fit.modulus)
    axes.plot(line, _heights(grid), color=BLUE, linewidth=1.6, label="maximum likelihood")
    axes.plot(
        points, _heights(places), "o", color=VERMILION, markersize=5.5, markeredgecolor="white", label="bars"
    )
    if sheet.survived_mpa:
        bottom = [_height_of(lowest)] * len(sheet.survived_mpa)
        axes.plot(sheet.survived_mpa, bottom, "^", color=INK, markerfacecolor="none", label=SURVIVED)
    _weibull_axes(axes, lowest, np.concatenate((line, np.array(stresses))))
    axes.set_title("Weibull plot  (points at (i-0.5)/n)", loc="left")
    axes.legend(loc="lower right", frameon=False, fontsize=9)
    axes.text(
        0.02, 0.97, weibull_words(sheet), transform=axes.transAxes, va="top", fontsize=10, linespacing=1.4
    )


def _weibull_axes(axes: Axes, lowest: float, shown_mpa: Floats) -> None:
    from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullFormatter, NullLocator

    shown = [percent for percent in PERCENTS if percent / 100.0 >= lowest * 0.9]
    axes.set_yticks([_height_of(percent / 100.0) for percent in shown], [f"{percent:g}" for percent in shown])
    axes.set_ylim(_height_of(lowest) - 0.15, _height_of(0.995) + 0.1)
    low, high = float(shown_mpa.min()), float(shown_mpa.max())
    pad = (high / low) ** 0.12
    axes.set_xscale("log")
    axes.set_xlim(low / pad, high * pad)
    ticks = MaxNLocator(7, steps=[1, 2, 2.5, 5, 10]).tick_values(low / pad, high * pad)
    axes.xaxis.set_major_locator(FixedLocator([t for t in ticks if low / pad <= t <= high * pad]))
    axes.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axes.xaxis.set_minor_locator(NullLocator())
    axes.xaxis.set_minor_formatter(NullFormatter())
    axes.set_xlabel("strength, MPa (logarithmic)")
    axes.set_ylabel("probability of failure, %")


def _height_of(probability: float) -> float:
    return math.log(-math.log1p(-probability))


def _heights(probabilities: Floats) -> Floats:
    heights: Floats = np.log(-np.log1p(-probabilities))
    return heights


def weibull_words(sheet: SeriesSheet) -> str:
    """m is never printed without its number of bars, its method and its bounds."""
    fit, bounds = sheet.fit, sheet.bounds
    if fit is None:
        return ""
    bars = f"{fit.failed} breaks" + (f", {fit.suspended} did not break" if fit.suspended else "")
    lines = [f"m = {fit.modulus:.1f}  (maximum likelihood, {bars})"]
    if bounds is not None:
        lines.append(f"    90 %: {_range(bounds.modulus.low, bounds.modulus.high, 1)}")
    if sheet.unbiased is not None:
        lines.append(f"    unbiased {sheet.unbiased:.1f}")
    lines.append(f"σ₀ = {fit.scale_mpa:.0f} MPa")
    if bounds is not None:
        lines.append(f"    90 %: {_range(bounds.scale_mpa.low, bounds.scale_mpa.high, 0)} MPa")
    return "\n".join(lines)


def _range(low: float | None, high: float | None, decimals: int) -> str:
    ends = ["?" if end is None else f"{end:.{decimals}f}" for end in (low, high)]
    return " to ".join(ends)


def draw_few(axes: Axes, sheet: SeriesSheet) -> None:
    """Too few bars for a Weibull plot: their numbers in words."""
    axes.axis("off")
    rows = [f"{bar.name:<16}{_outcome(bar)}" for bar in sheet.bars]
    summary = sheet.summary
    if summary is not None:
        rows += ["", f"{'mean':<16}{summary.mean_mpa:8.1f} MPa"]
        if summary.spread_mpa is not None:
            rows.append(f"{'s':<16}{summary.spread_mpa:8.1f} MPa")
    rows += ["", "fewer than 5 breaks: no Weibull estimate"]
    axes.text(0.0, 1.0, "\n".join(rows), transform=axes.transAxes, va="top", family="monospace", fontsize=12)


def _outcome(bar: BarRow) -> str:
    if bar.strength_mpa is not None:
        spread = "" if bar.u_k2_mpa is None else f" ± {bar.u_k2_mpa:.1f}"
        return f"{bar.strength_mpa:8.1f}{spread} MPa"
    return "no strength" if bar.survived_mpa is None else f"{bar.survived_mpa:8.1f} MPa survived"
