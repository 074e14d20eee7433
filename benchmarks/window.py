"""Window: a redraw with an hour of 5 kS/s behind it against a bare pyqtgraph curve of as many pixels; one turn; memory.

Off-screen, software rendering, 1920 x 1080: the reference. The floor draws a curve of two points a pixel with setData
and repaint in the same process, turn about with ours. Ours thins 131,072 kept rows to that many points and draws marks
and axes besides. "a turn" is what lies between an update in the window's hands and the painted pixel; a sample waits up
to one turn of 33 ms before it.
"""

from __future__ import annotations

import os
import time
from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np

from benchmarks.harness import Report, high_water_kb

if TYPE_CHECKING:
    from tests.monitor.window_rig import WindowRig

NAME = "window"
RATE_HZ = 5_000
HOUR_ROWS = 18_000_000
BLOCK_ROWS = 250  # 20 updates a second
FEED_ROWS = 10_000
MIB = 1024.0


def run(report: Report) -> None:
    os.environ["QT_QPA_PLATFORM"] = "offscreen"
    from PySide6.QtWidgets import QApplication

    from tests.monitor.window_rig import WindowRig, opened, run_of, summary_body

    app = QApplication.instance() or QApplication([])
    rig = WindowRig(operator="")
    window = rig.window
    window.resize(1920, 1080)
    window.show()
    rig.feed.lay("event", opened())
    rig.be("loading", 1.0, run=run_of(), bar=1)
    bare = BareCurve(window.trace.plot.width(), window.trace.plot.height())
    app.processEvents()
    before_kb = high_water_kb()
    rows = HOUR_ROWS // (20 if report.quick else 1)
    for start in range(0, rows, FEED_ROWS):
        window.trace.take(columns(start, FEED_ROWS))
    grown = (high_water_kb() - before_kb) / MIB
    ours: list[float] = []
    floor: list[float] = []
    turns: list[float] = []
    for turn in range(60 if report.quick else 300):
        block = columns(rows + turn * BLOCK_ROWS, BLOCK_ROWS)
        floor.append(spent_ms(bare.draw))
        window.trace.take(block)
        ours.append(spent_ms(lambda: (window.trace.redraw(), window.trace.plot.viewport().repaint())))
        rig.feed.lay("trace", {"run_id": "run-DEMO-01"}, columns(rows + turn * BLOCK_ROWS, BLOCK_ROWS))
        rig.feed.lay("summary", summary_body(300.0 + turn, moving=True, data_age_s=0.0))
        turns.append(spent_ms(lambda: (window.turn(), app.processEvents())))
    goals = {"p50": "<= 1.5 x bare curve"}
    report.quantiles(NAME, f"redraw at {rows / 1e6:.1f} million rows", ours, "ms", floor, "bare curve", goals)
    report.quantiles(
        NAME, "a turn: update to pixel", turns, "ms", goals={"p99": "<= 27 ms (60 ms less 33 ms of waiting)"}
    )
    report.add(NAME, f"memory grown by {rows / 1e6:.1f} million rows", grown, "MiB")
    report.add(
        NAME, "memory of the window's process (VmHWM)", high_water_kb() / MIB, "MiB", goal="<= 300 MiB"
    )
    stops(report, rig)
    window.close()


def stops(report: Report, rig: WindowRig) -> None:
    """Key-down in the busy window until the stop line is at work, in its own thread."""
    from PySide6.QtCore import Qt
    from PySide6.QtTest import QTest
    from PySide6.QtWidgets import QApplication

    from tests.monitor.window_rig import summary_body

    window, waits = rig.window, []
    window.begin()
    for press in range(50 if report.quick else 300):
        rig.feed.lay("trace", {"run_id": "run-DEMO-01"}, columns(press * BLOCK_ROWS, BLOCK_ROWS))
        rig.feed.lay("summary", summary_body(300.0, moving=True, data_age_s=0.0))
        QApplication.processEvents()
        struck_s = time.monotonic()
        QTest.keyPress(window, Qt.Key.Key_Space)
        while len(rig.stops) <= press:
            QApplication.processEvents()
        waits.append(1e3 * (rig.stops[press][1] - struck_s))
    report.quantiles(
        NAME, "key-down to the stop line", waits, "ms", goals={"p99": "<= 50 ms with its datagram"}
    )


class BareCurve:
    """A plot and a curve, nothing else, two points a pixel."""

    def __init__(self, width_px: int, height_px: int) -> None:
        import pyqtgraph as pg

        self._plot = pg.PlotWidget()
        self._plot.resize(width_px, height_px)
        self._curve = self._plot.plot(pen=pg.mkPen("w", width=2))
        self._plot.show()
        self._x = np.linspace(0.0, 1.0, 2 * width_px)
        self._turn = 0

    def draw(self) -> None:
        self._turn += 1
        self._curve.setData(self._x, np.sin(8.0 * self._x + 0.01 * self._turn) + noise(len(self._x)))
        self._plot.viewport().repaint()


def columns(start: int, count: int) -> dict[str, np.ndarray]:
    """A slow ramp with noise, as a bar gives that is loaded for an hour."""
    time_s = np.arange(start, start + count) / RATE_HZ
    load_n = 0.1 * time_s + 0.15 * noise(count)
    deflection = time_s * 2e-5 + 1e-5 * noise(count)
    return {
        "time_s": time_s,
        "net_n": load_n,
        "stress_mpa": load_n / 1.2,
        "deflection_mm": deflection,
        "strain": deflection / 100,
    }


_RNG = np.random.default_rng(7)


def noise(count: int) -> np.ndarray:
    return _RNG.standard_normal(count)


def spent_ms(work: Callable[[], object]) -> float:
    begin = time.perf_counter()
    work()
    return 1e3 * (time.perf_counter() - begin)
