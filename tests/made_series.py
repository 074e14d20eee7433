"""Sealed records of a made-up series, in a second or two: the real bench core on the virtual clock, the real seal."""

from __future__ import annotations

import tempfile
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from daq.cards.frame import FrameCard
from daq.cards.method import MethodCard
from daq.cards.series import Specimen
from daq.record.columns import Columns
from daq.record.head import head_of_entry
from daq.record.rows import is_event
from daq.record.sealing import Sealing
from daq.results.reduce import result_mapping
from daq.stream.entry import pack
from daq.watch.requests import Reset, StartRun, StopRequest
from daq.watch.states import LATCHED
from daq.watch.values import State
from simulator.card import SimulatorCard
from simulator.scenario import VirtualBench
from tests.scenarios.world import FIXTURE, bar, bars_of, frame_of, lay, method_of, warm


def made_series(
    out: Path,
    bars: int | Sequence[tuple[Specimen, Mapping[str, Any]]],
    *,
    series: str = "kiln-lane",
    frame: FrameCard | None = None,
    method: MethodCard | None = None,
    card: SimulatorCard | None = None,
    fixture: str = FIXTURE,
    interrupt: frozenset[str] = frozenset(),
    run: Mapping[str, Any] | None = None,
) -> list[Path]:
    """Break bars one after another and seal each. bars: how many, or (specimen, its truth). interrupt: numbers of bars
    that a person stops on the way. run: further fields of the run, such as temperature_c.
    """
    bench = VirtualBench(
        frame or frame_of(rate_hz=100.0), card or bars_of(contact={"toe_mm": 0.0083}, seed=30)
    )
    wanted = [(bar(f"A-{n:02d}"), {}) for n in range(1, bars + 1)] if isinstance(bars, int) else bars
    warm(bench)
    return [
        _one(
            bench,
            out,
            series,
            method or method_of(),
            specimen,
            truth,
            fixture,
            specimen.number in interrupt,
            run or {},
        )
        for specimen, truth in wanted
    ]


def _one(
    bench: VirtualBench, out: Path, series: str, method: MethodCard, specimen: Specimen, truth: Mapping[str, Any],
    fixture: str, interrupt: bool, run: Mapping[str, Any],
) -> Path:  # fmt: skip
    lay(bench, specimen, **truth)
    named = {"series": series, "operator": "Q. Tester", **run}
    bench.request(bench.opening(method, specimen, fixture, **named))
    assert bench.run_until(lambda: bench.state is State.READY, 20.0), bench.events[-3:]
    bench.request(StartRun())
    if interrupt:
        assert bench.run_until(lambda: bench.state is State.LOADING, 60.0)
        bench.run_to(bench.now_s + 4.0)
        bench.request(StopRequest("Q. Tester"))
    closed = bench.run_until(lambda: bench.closed, 300.0)
    assert closed, bench.events[-5:]
    path = _seal(bench, out)
    bench.entries.clear()
    bench.events.clear()
    if bench.state in LATCHED:
        bench.hands.do(b'{"raise": true}')
        bench.run_to(bench.now_s + 5.0)
        bench.request(Reset("Q. Tester", looked=True))
        bench.run_to(bench.now_s + 1.0)
    return path


def _seal(bench: VirtualBench, out: Path) -> Path:
    opened = [place for place, entry in enumerate(bench.entries) if is_event(entry, "run_opened")][-1]
    with tempfile.TemporaryDirectory() as folder:
        columns = Columns(Path(folder), head_of_entry(bench.entries[opened]))
        for entry in bench.entries[opened:]:
            columns.add(entry, pack(entry))
            if is_event(entry, "run_closed"):
                break
        columns.finish()
        sealed = Sealing(out, result_mapping, bool).seal(columns, "")
        columns.remove()
    assert not sealed.failure, sealed.failure
    return sealed.path
