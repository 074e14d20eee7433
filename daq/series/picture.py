"""One picture of a series, 1600 x 900: every trace, strengths in order with their mean, and the Weibull plot.

matplotlib belongs to the extra `report` and is imported only here. The same records give the same file.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from daq.errors import MidspanError
from daq.series.panels import INK, VERMILION, draw_few, draw_order, draw_traces, draw_weibull
from daq.series.sheet import SeriesSheet, sheet_of
from daq.stream.rundata import RunData

if TYPE_CHECKING:
    from matplotlib.figure import Figure

WIDTH_PX, HEIGHT_PX, DPI = 1600, 900, 100
LOOK = {
    "font.family": "DejaVu Sans",
    "font.size": 11.0,
    "axes.titlesize": 12.0,
    "axes.titleweight": "bold",
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.grid": True,
    "grid.color": "#E2E2E2",
    "grid.linewidth": 0.7,
    "axes.axisbelow": True,
    "text.color": INK,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "xtick.color": INK,
    "ytick.color": INK,
}


def series_picture(
    records: Sequence[tuple[str, RunData, Mapping[str, Any]]], path: str | Path, title: str
) -> None:
    """records: (bar's name, run, result as JSON) in firing order. Writes a PNG; an older one is replaced."""
    try:
        import matplotlib
        from matplotlib.backends.backend_agg import FigureCanvasAgg
        from matplotlib.figure import Figure
    except ImportError as error:
        raise MidspanError("the picture needs matplotlib: install midspan with the extra 'report'") from error
    sheet = sheet_of(records, title)
    with matplotlib.rc_context(LOOK):  # type: ignore[arg-type]  # its keys are literals in some versions only
        figure = Figure(figsize=(WIDTH_PX / DPI, HEIGHT_PX / DPI), dpi=DPI)
        FigureCanvasAgg(figure)
        _compose(figure, sheet)
        figure.savefig(path, format="png", metadata={"Software": None})


def _compose(figure: Figure, sheet: SeriesSheet) -> None:
    grid = figure.add_gridspec(
        2, 2, left=0.05, right=0.985, top=0.865, bottom=0.075, wspace=0.14, hspace=0.32,
        width_ratios=(1.0, 1.05), height_ratios=(0.8, 1.2),
    )  # fmt: skip
    figure.text(0.05, 0.945, sheet.title, fontsize=18, fontweight="bold")
    figure.text(0.05, 0.915, _subtitle(sheet), fontsize=12)
    if sheet.simulated:
        mark = {"boxstyle": "round,pad=0.35", "facecolor": "white", "edgecolor": VERMILION, "linewidth": 2.5}
        figure.text(
            0.985,
            0.945,
            "SIMULATED DATA",
            fontsize=16,
            fontweight="bold",
            color=VERMILION,
            ha="right",
            bbox=mark,
        )
    draw_traces(figure.add_subplot(grid[:, 0]), sheet)
    draw_order(figure.add_subplot(grid[0, 1]), sheet)
    lower = figure.add_subplot(grid[1, 1])
    if sheet.fit is None:
        draw_few(lower, sheet)
    else:
        draw_weibull(lower, sheet)
    if sheet.simulated:
        figure.text(
            0.28,
            0.46,
            "SIMULATED",
            fontsize=70,
            color=VERMILION,
            alpha=0.07,
            rotation=32,
            ha="center",
            va="center",
        )


def _subtitle(sheet: SeriesSheet) -> str:
    broken, alive = len(sheet.strengths_mpa), len(sheet.bars) - len(sheet.strengths_mpa)
    words = f"{len(sheet.bars)} bars: {broken} with a strength" + (f", {alive} without" if alive else "")
    summary = sheet.summary
    if summary is None:
        return words
    words += f"   mean {summary.mean_mpa:.1f} MPa"
    if summary.spread_mpa is not None:
        words += f"   s {summary.spread_mpa:.1f} MPa   {summary.min_mpa:.1f} to {summary.max_mpa:.1f} MPa"
    return words
