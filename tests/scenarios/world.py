"""Worlds for scenarios: shipped cards, changed where a scenario says so, and bars of known truth. Seeds are fixed."""

from __future__ import annotations

import json
import tempfile
from collections.abc import Mapping, Sequence
from functools import lru_cache
from pathlib import Path
from typing import Any

import simulator
from daq.cards.frame import FrameCard
from daq.cards.load import example_path, load_frame, load_method
from daq.cards.method import MethodCard
from daq.cards.series import Specimen
from daq.record.columns import Columns
from daq.record.head import head_of_entry
from daq.record.rows import is_event
from daq.results.reduce import reduce
from daq.stream.entry import Entry, pack
from simulator.card import SimulatorCard, load_simulator, simulator_from
from simulator.scenario import VirtualBench

FIXTURE = "quarter-40-20"


@lru_cache
def shipped_frame(name: str) -> FrameCard:
    return load_frame(example_path(name))


@lru_cache
def shipped_method(name: str) -> MethodCard:
    return load_method(example_path(name))


def frame_of(
    name: str = "kiln-lane-a.toml", *, rate_hz: float = 1000.0, gap_mm: float = 0.15, **motion: Any
) -> FrameCard:
    """A shipped frame at another rate; silence as on a real link: max(3 periods, 50 ms)."""
    frame = shipped_frame(name)
    links = tuple(link.model_copy(update={"rate_hz": rate_hz, "silence_s": None}) for link in frame.links)
    assert frame.motion is not None
    moved = frame.motion.model_copy(update={"gap_mm": gap_mm, "backoff_mm": 0.3, **motion})
    return frame.model_copy(update={"links": links, "motion": moved})


def method_of(
    name: str = "alumina-bars.toml", *, speed_mm_min: float | None = None, **changes: Any
) -> MethodCard:
    method = shipped_method(name)
    if speed_mm_min is not None:
        changes["rate"] = method.rate.model_copy(update={"speed_mm_min": speed_mm_min})
    return method.model_copy(update=changes)


def bars_of(
    *, faults: Sequence[Mapping[str, Any]] = (), seed: int = 1, **parts: Mapping[str, Any]
) -> SimulatorCard:
    """The shipped alumina machine with other parts and misfortunes."""
    card = load_simulator(Path(simulator.__file__).parent / "examples" / "alumina.toml").model_dump()
    for part, changes in parts.items():
        card[part] = {**card[part], **changes}
    return simulator_from({**card, "seed": seed, "faults": list(faults)})


def bar(number: str = "B-1", width_mm: float = 4.0, thickness_mm: float = 3.0) -> Specimen:
    return Specimen(
        number=number, width_mm=(width_mm,) * 3, thickness_mm=(thickness_mm,) * 3, chamfer_mm=0.12
    )


def lay(bench: VirtualBench, specimen: Specimen, **truth: Any) -> None:
    """The person lays a bar; strength_mpa, break_at_mm set its truth."""
    answer = bench.hands.do(json.dumps({"mount": {**specimen.model_dump(mode="json"), **truth}}).encode())
    assert "mounted" in answer, answer


def do(bench: VirtualBench, **words: Any) -> None:
    answer = bench.hands.do(json.dumps(words).encode())
    assert "refused" not in answer, answer


def warm(bench: VirtualBench) -> None:
    """Let the first data and the first status word come."""
    bench.run_to(bench.now_s + 0.5)


def break_one(bench: VirtualBench, method: MethodCard, specimen: Specimen, fixture: str = FIXTURE) -> bool:
    warm(bench)
    return bench.break_bar(method, specimen, fixture)


def result_of(bench: VirtualBench, run: int = -1) -> dict[str, Any]:
    """One run, from its entries through columns and reduction, as the archivist would."""
    opened = [place for place, entry in enumerate(bench.entries) if is_event(entry, "run_opened")][run]
    return dict(reduced(bench.entries[opened:]))


def reduced(entries: Sequence[Entry]) -> Mapping[str, Any]:
    """The result of a run from its opening on, as far as these entries go."""
    with tempfile.TemporaryDirectory() as folder:
        columns = Columns(Path(folder), head_of_entry(entries[0]))
        for entry in entries:
            columns.add(entry, pack(entry))
            if is_event(entry, "run_closed"):
                break
        columns.finish()
        result = reduce(columns.run_data()).as_json()
        columns.remove()
        return result
