"""The report's figures as PNG bytes: Weibull plot, order, break map, small multiples of the traces. No files, no clock.

matplotlib belongs to the extra `report` and is imported only here and in `picture`. The same series: the same bytes.
"""

from __future__ import annotations

import io
import math
from collections.abc import Callable, Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from daq.errors import MidspanError
from daq.mechanics.quantity import Floats
from daq.results.rules import Counting
from daq.series.leaf import Leaf, Series
from daq.series.panels import BLUE, GREEN, GREY, INK, ORANGE, SURVIVED, VERMILION, draw_order, draw_weibull
from daq.series.picture import LOOK
from daq.series.ranks import suspended_positions
from daq.series.sheet import LEVEL, BarRow, SeriesSheet
from daq.stream.thin import thin_minmax

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

DPI = 150
WIDTH_IN = 7.4
CELLS_ACROSS = 6
SUSPENDED = "suspended"
TRACE_ROWS_MAX = 160
POPULATION_STYLES = ((ORANGE, "--", "s"), (GREEN, "-.", "D"), (GREY, (0, (1, 1)), "v"))
MARKS = {
    Counting.COUNTED: ("o", BLUE, BLUE),
    Counting.WITH_REMARK: ("s", "white", BLUE),
    Counting.PROVISIONAL: ("D", "white", ORANGE),
    Counting.NOT_COUNTED: ("X", VERMILION, VERMILION),
    Counting.INTERRUPTED: ("^", "white", INK),
}


def figures_of(series: Series) -> dict[str, bytes]:
    """By the names that the report's blocks use."""
    try:
        import matplotlib
    except ImportError as error:
        raise MidspanError("the report needs matplotlib: install midspan with the extra 'report'") from error
    sheet = sheet_from(series)
    rows = max(1, math.ceil(len(series.leaves) / CELLS_ACROSS))
    made: dict[str, tuple[float, Callable[[Figure], None]]] = {
        "order": (2.6, lambda figure: _order(figure, sheet)),
        "traces": (0.45 + 1.02 * rows, lambda figure: _traces(figure, series, rows)),
    }
    if series.analysis.weibull is not None:
        made["weibull"] = (3.4, lambda figure: _weibull(figure, series, sheet))
    if series.analysis.map is not None:
        made["breakmap"] = (2.3, lambda figure: _breakmap(figure, series))
    look: dict[str, Any] = {**LOOK, "font.size": 8.5, "axes.titlesize": 9.0}
    with matplotlib.rc_context(look):  # type: ignore[arg-type]
        return {name: _png(height_in, draw) for name, (height_in, draw) in made.items()}


def _png(height_in: float, draw: Callable[[Figure], None]) -> bytes:
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(WIDTH_IN, height_in), dpi=DPI)
    FigureCanvasAgg(figure)
    draw(figure)
    out = io.BytesIO()
    figure.savefig(out, format="png", metadata={"Software": None})
    return out.getvalue()


def sheet_from(series: Series) -> SeriesSheet:
    """The series as the panels of the picture draw it."""
    found = series.analysis
    bars = tuple(
        BarRow(
            name=leaf.number,
            strength_mpa=leaf.standing.strength_mpa if leaf.standing.counts else None,
            u_k2_mpa=leaf.value("strength_u_k2_mpa"),
            survived_mpa=leaf.standing.strength_mpa or leaf.value("stress_survived_mpa"),
            remarks=int(leaf.standing.verdict.counting is Counting.WITH_REMARK),
            trace=np.empty((0, 2)),
        )
        for leaf in series.leaves
    )
    one = found.weibull
    return SeriesSheet(
        title=series.title,
        bars=bars,
        axis="strain",
        source="",
        simulated=series.simulated,
        summary=found.summary,
        fit=None if one is None else one.fit,
        unbiased=None if one is None else one.unbiased,
        bounds=None if one is None else one.bounds[LEVEL],
    )


def _weibull(figure: Figure, series: Series, sheet: SeriesSheet) -> None:
    axes = figure.add_axes((0.085, 0.115, 0.9, 0.825))
    draw_weibull(axes, sheet)
    for text in axes.texts:
        text.set_fontsize(8.5)
        text.set_text(text.get_text().replace(SURVIVED, SUSPENDED))
    _relabel(axes)
    _populations(axes, series)
    axes.legend(loc="upper left", bbox_to_anchor=(0.0, 0.68), frameon=False, fontsize=7.5)


def _populations(axes: Axes, series: Series) -> None:
    """Each coded flaw population with its own mark and line, over all bars."""
    counted = series.analysis.counted
    for one, (colour, style, mark) in zip(series.analysis.populations, POPULATION_STYLES, strict=False):
        code = one.name.removeprefix("origin ")
        pairs = [(bar.strength_mpa or 0.0, bar.population == code) for bar in counted]
        pairs += [(bar.suspended_mpa or 0.0, False) for bar in series.analysis.suspended]
        stresses, places = suspended_positions([s for s, _ in pairs], [b for _, b in pairs])
        heights: Floats = np.log(-np.log1p(-places))
        axes.plot(stresses, heights, mark, color=colour, markersize=5, markerfacecolor="none", label=code)
        low, high = axes.get_ylim()
        grid = np.linspace(low, high, 40)
        line = one.fit.scale_mpa * np.exp(grid / one.fit.modulus)
        left, right = axes.get_xlim()
        shown = (line >= left) & (line <= right)
        axes.plot(line[shown], grid[shown], color=colour, linestyle=style, linewidth=1.2,
                  label=f"{code}: m = {one.fit.modulus:.1f}")  # fmt: skip


def _order(figure: Figure, sheet: SeriesSheet) -> None:
    axes = figure.add_axes((0.085, 0.15, 0.9, 0.75))
    draw_order(axes, sheet)
    _relabel(axes)
    axes.legend(loc="upper center", ncol=4, frameon=False, fontsize=8.5)


def _relabel(axes: Axes) -> None:
    """In a report a bar may be suspended because it does not count, not only because it did not break."""
    for line in axes.get_lines():
        if line.get_label() == SURVIVED:
            line.set_label(SUSPENDED)


def _breakmap(figure: Figure, series: Series) -> None:
    axes = figure.add_axes((0.085, 0.185, 0.9, 0.70))
    spans = next(bar.spans for bar in series.analysis.pool.bars if bar.from_mid_mm is not None and bar.spans)
    for kind, (mark, face, edge) in MARKS.items():
        points = [
            (bar.from_mid_mm, bar.strength_mpa or bar.suspended_mpa or math.nan)
            for bar in series.analysis.pool.bars
            if bar.from_mid_mm is not None and bar.counting is kind
        ]
        if points:
            axes.plot(
                *zip(*points, strict=True),
                mark,
                color=edge,
                markerfacecolor=face,
                markersize=5.5,
                label=kind.value,
            )
    for sign in (-1.0, 1.0):
        axes.axvline(sign * spans.support_mm / 2.0, color=INK, linewidth=1.2)
        if spans.load_mm:
            axes.axvline(sign * spans.load_mm / 2.0, color=INK, linewidth=1.0, linestyle="--")
    axes.axvline(0.0, color=GREY, linewidth=0.8, linestyle=":")
    axes.set_xlim(-0.54 * spans.support_mm, 0.54 * spans.support_mm)
    low, high = axes.get_ylim()
    axes.set_ylim(low, high + 0.18 * (high - low))
    axes.set_xlabel("from mid-span, mm (right positive)")
    axes.set_ylabel("strength, MPa")
    axes.set_title("Break map", loc="left")
    axes.legend(loc="upper center", ncol=5, frameon=False, fontsize=8)


# --- small multiples: one pair of axes for all, every field drawn into it


def _traces(figure: Figure, series: Series, rows: int) -> None:
    from matplotlib.collections import LineCollection

    axes = figure.add_axes((0.0, 0.0, 1.0, 1.0))
    axes.set_axis_off()
    axes.set_xlim(0.0, CELLS_ACROSS)
    head = 0.45 / 1.02
    axes.set_ylim(rows + head, 0.0)
    name, factor, words = _axis(series.leaves)
    drawn = [_trace(leaf, name) for leaf in series.leaves]
    right = max((float(np.nanmax(rows_[:, 0])) for rows_ in drawn if rows_.size), default=1.0) or 1.0
    top = max((float(np.nanmax(rows_[:, 1])) for rows_ in drawn if rows_.size), default=1.0) or 1.0
    frames, lines = [], []
    for place, (leaf, points) in enumerate(zip(series.leaves, drawn, strict=True)):
        x0, y0 = place % CELLS_ACROSS + 0.06, place // CELLS_ACROSS + head + 0.86
        frames.append([(x0, y0 - 0.72), (x0, y0), (x0 + 0.88, y0)])
        if points.size:
            lines.append(np.column_stack((x0 + 0.86 * points[:, 0] / right, y0 - 0.70 * points[:, 1] / top)))
        _field(axes, leaf, lines[-1] if points.size else None, x0, y0)
    axes.add_collection(LineCollection(frames, colors=GREY, linewidths=0.7))
    axes.add_collection(LineCollection(lines, colors=BLUE, linewidths=0.9))
    axes.text(0.06, 0.03, "Traces to the break", fontsize=9, fontweight="bold", va="top")
    scale = f"height of a field {top:.0f} MPa, width {right * factor:.3g} {words}; × break, △ did not break"
    axes.text(CELLS_ACROSS - 0.06, 0.03, scale, fontsize=7.5, va="top", ha="right")


def _field(axes: Axes, leaf: Leaf, line: Floats | None, x0: float, y0: float) -> None:
    broken = leaf.standing.strength_mpa is not None
    if line is not None:
        end = line[int(np.argmin(line[:, 1]))]
        axes.plot(
            *end,
            "x" if broken else "^",
            color=VERMILION if broken else INK,
            markersize=4,
            markerfacecolor="none",
        )
    name = leaf.number if leaf.loading == 1 else f"{leaf.number} ({leaf.loading})"
    axes.text(x0 + 0.02, y0 - 0.74, name, fontsize=7, va="bottom")
    strength = leaf.standing.strength_mpa
    shown = "" if strength is None else f"{strength:.0f} MPa"
    if leaf.standing.verdict.counting in (Counting.NOT_COUNTED, Counting.INTERRUPTED):
        shown = leaf.standing.verdict.counting.value
    axes.text(x0 + 0.88, y0 - 0.74, shown, fontsize=6.5, va="bottom", ha="right")


AXES = (("strain", 100.0, "% strain"), ("deflection_mm", 1000.0, "µm"), ("time_s", 1.0, "s"))


def _axis(leaves: Sequence[Leaf]) -> tuple[str, float, str]:
    """The first axis that every trace has."""
    return next((one for one in AXES if all(_has(leaf.trace, one[0]) for leaf in leaves)), AXES[-1])


def _has(trace: Mapping[str, Floats], name: str) -> bool:
    return name in trace and "stress_mpa" in trace


def _trace(leaf: Leaf, axis: str) -> Floats:
    """From first load to the break, thinned by extremes: (k, 2) axis and stress; empty without stress."""
    if not _has(leaf.trace, axis):
        return np.empty((0, 2))
    x, y = leaf.trace[axis], leaf.trace["stress_mpa"]
    inside = np.isfinite(x) & np.isfinite(y)
    end_s = leaf.value("break_at_s")
    if end_s is not None and "time_s" in leaf.trace:
        inside &= leaf.trace["time_s"] <= end_s
    rows = np.column_stack((x[inside], y[inside]))
    if not rows.size:
        return np.empty((0, 2))
    begin = np.flatnonzero(rows[: int(np.argmax(rows[:, 1])) + 1, 1] < 0.01 * rows[:, 1].max())
    rows = rows[int(begin[-1]) if begin.size else 0 :]
    if end_s is None:
        rows = rows[: int(np.argmax(rows[:, 1])) + 1]
    if axis == "time_s":
        rows[:, 0] -= rows[0, 0]
    return thin_minmax(rows, 1, TRACE_ROWS_MAX)
