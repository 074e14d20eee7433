"""received = recorded + rejected, also where a full ring has refused rows: what was not recorded is not called so."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

import simulator
from daq.bench.core import RING_FULL, NewEntry
from daq.cards.load import example_path, load_frame, load_series
from daq.stream.entry import Kind
from daq.stream.payloads import unpack_block, unpack_event
from daq.stream.ring import Ring, RingReader, RingWriter
from daq.watch.requests import CloseRun
from daq.watch.values import State
from simulator.card import load_simulator
from simulator.scenario import VirtualBench

RING_BYTES = 64 << 10  # half a second of this frame


def open_bench() -> VirtualBench:
    """A bar called and tared at the demonstration's frame; nothing moves."""
    card = load_simulator(Path(simulator.__file__).parent / "examples" / "alumina.toml")
    bench = VirtualBench(load_frame(example_path("kiln-lane-demo.toml")), card)
    series = load_series(example_path("demo-series.toml"))
    bench.hands.do(json.dumps({"mount": series.specimens[0].model_dump(mode="json")}).encode())
    bench.run_to(0.5)
    bench.open_run(series.method, series.specimens[0], series.card.fixture)
    assert bench.run_until(lambda: bench.state is State.READY, 20.0)
    return bench


def rows_of(batch: list[NewEntry]) -> int:
    return sum(unpack_block(payload).count for kind, _, payload in batch if kind is Kind.BLOCK)


def events_of(batch: list[NewEntry]) -> list[dict[str, Any]]:
    return [dict(unpack_event(payload)) for kind, _, payload in batch if kind is Kind.EVENT]


def hear(bench: VirtualBench, seconds: float) -> None:
    """Bytes reach the core; what it makes of them is not taken yet."""
    bench.now_s += seconds
    for _, data in bench.wire.read(bench.now_s, 0):
        bench.core.received(0, data, bench.now_ns)


def offer(bench: VirtualBench, ring: RingWriter) -> list[NewEntry]:
    """What the bench process does with the entries of a wake; returns them."""
    offered: list[NewEntry] = []
    while batch := bench.core.entries():
        offered += batch
        if not ring.append_batch(batch):
            bench.core.refused()
    return offered


def test_rows_that_found_no_room_are_rejected_by_name(tmp_path: Path) -> None:
    bench = open_bench()
    before = bench.core._account[0].recorded
    ring = Ring.create(tmp_path / "ring", RING_BYTES, 5)
    reader = RingReader(tmp_path / "ring")
    offered = recorded = 0
    for turn in range(60):
        hear(bench, 0.05)
        offered += rows_of(offer(bench, ring))
        if not 10 <= turn < 40:  # the recorder is away for a second and a half
            recorded += sum(unpack_block(e.payload).count for e in reader.read_new() if e.kind is Kind.BLOCK)
            reader.acknowledge(reader.last_sequence, 1)
    bench.core.request(CloseRun("tried"), bench.now_ns)
    last = offer(bench, ring)
    offered += rows_of(last)
    (account,) = [e for e in events_of(last) if e["event"] == "accounting"]
    (link,) = account["links"]
    lost = link["rejected"][RING_FULL]
    recorded += sum(unpack_block(e.payload).count for e in reader.read_new() if e.kind is Kind.BLOCK)
    assert lost > 100 and lost == offered - recorded
    assert link["recorded"] == before + recorded
    assert link["received"] == link["recorded"] + sum(link["rejected"].values())
    assert bench.core.rejected[RING_FULL] == lost
    ring.close()
    reader.close()


@pytest.mark.parametrize("full", [False, True])
def test_the_account_knows_of_the_rows_that_came_with_the_end(full: bool) -> None:
    bench = open_bench()
    before = bench.core._account[0].recorded
    hear(bench, 0.05)
    bench.core.request(CloseRun("tried"), bench.now_ns)
    first = bench.core.entries()
    rows = rows_of(first)
    assert rows > 10 and "run_closed" not in [event["event"] for event in events_of(first)]
    if full:
        bench.core.refused()
    second = bench.core.entries()
    names = [event["event"] for event in events_of(second)]
    assert names.index("accounting") == names.index("run_closed") - 1
    link = events_of(second)[names.index("accounting")]["links"][0]
    assert link["recorded"] == before + (0 if full else rows)
    assert link["received"] == before + rows + sum(link["rejected"].values()) - (rows if full else 0)
    assert link["rejected"].get(RING_FULL, 0) == (rows if full else 0)
    assert bench.core.entries() == []
