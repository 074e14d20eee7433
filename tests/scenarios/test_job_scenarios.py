"""Acceptance scenarios, by number, on the virtual clock with the real wire bytes."""

from __future__ import annotations

import json
from typing import Any

import pytest

from daq.cards.frame import Fixture
from daq.errors import Refused
from daq.watch.requests import Jog, OpenRun, Reset, ReturnCrosshead, StartRun, StopRequest
from daq.watch.values import State
from simulator.scenario import VirtualBench
from tests.scenarios.world import (
    FIXTURE,
    bar,
    bars_of,
    break_one,
    do,
    frame_of,
    lay,
    method_of,
    result_of,
    warm,
)

pytestmark = pytest.mark.slow

CONTACT_FORCE_N = 5.0


def at_force(force_n: float, **fault: Any) -> dict[str, Any]:
    return {"at_force_n": force_n, **fault}


def start(bench: VirtualBench, method: Any, fixture: str = FIXTURE) -> None:
    """Open, tare, start."""
    warm(bench)
    bench.open_run(method, bar(), fixture)
    assert bench.run_until(lambda: bench.state is State.READY, 10.0), bench.named("tare_refused")
    bench.request(StartRun())


def truth_of(bench: VirtualBench, what: str) -> list[dict[str, Any]]:
    return [{"time_s": t.time_s, **t.fields} for t in bench.wire.machine.take_truths() if t.what == what]


def query(bench: VirtualBench) -> dict[str, Any]:
    return bench.hands.do(json.dumps({"query": True}).encode())


def stops(bench: VirtualBench) -> list[float]:
    return [at_s for at_s, data in bench.sent if data == b"S\r\n"]


# 1 ---------------------------------------------------------------------------------------------------------------
@pytest.mark.parametrize("bars", [10, pytest.param(30, marks=[pytest.mark.soak, pytest.mark.timeout(600)])])
def test_1_clean_alumina_series(bars: int) -> None:
    """All sudden, delay <= 15 ms, recovered peak within 0.1 % each and 0.02 % in the mean, no cautions."""
    biases, cautions = [], []
    card = bars_of(electronics={"batch_s": 0.004}, contact={"toe_mm": 0.0083}, seed=30)
    bench = VirtualBench(frame_of(), card, wake_s=0.004)
    warm(bench)
    for number in range(bars):
        specimen = bar(f"A-{number:02d}")
        lay(bench, specimen)
        assert bench.break_bar(method_of(), specimen, FIXTURE)
        (broke,) = truth_of(bench, "broke")
        result = result_of(bench)
        fracture = bench.named("fracture")[-1]
        assert result["break_class"] == "sudden break"
        assert fracture["delay_s"] <= 0.015
        biases.append(result["peak_recovered_n"] / broke["force_n"] - 1.0)
        assert abs(biases[-1]) <= 1e-3
        assert result["chamfer_factor"] == pytest.approx(1.0069, abs=1e-4)
        assert result["stress_rate_mean_mpa_s"] == pytest.approx(23.6, abs=0.5)
        assert abs(bench.named("stopped")[-2]["run_on_mm"]) <= 0.003
        cautions += [event for event in bench.events if event["severity"] != "remark"]
        bench.events.clear()
        bench.entries.clear()
    assert abs(sum(biases) / len(biases)) <= 2e-4
    assert cautions == []


# 5 ---------------------------------------------------------------------------------------------------------------
def test_5_graphite_fails_gradually() -> None:
    """Third-point, 100 S/s, softening 15 %, fall 80 ms: called 55 to 200 ms after onset, smooth top within 0.2 %."""
    fixture = Fixture(
        name="third-60-20", geometry="4-point", support_span_mm=60.0, load_span_mm=20.0, rating_n=2000.0
    )
    frame = frame_of(rate_hz=100.0)
    frame = frame.model_copy(update={"fixtures": (fixture, *frame.fixtures), "compliance": None})
    card = bars_of(
        bar={
            "modulus_gpa": 11.0,
            "width_mm": 10.0,
            "thickness_mm": 10.0,
            "chamfer_mm": 0.0,
            "scatter_mm": 0.0,
        },
        contact={"fixture": "third-60-20", "toe_mm": 0.02},
        after_break={
            "kind": "gradual",
            "fall_s": 0.08,
            "softening_percent": 15.0,
            "softening_from_percent": 60.0,
        },
    )
    bench = VirtualBench(frame, card)
    specimen = bar("G-1", 10.0, 10.0).model_copy(update={"chamfer_mm": 0.0})
    lay(bench, specimen, strength_mpa=45.0)
    assert break_one(bench, method_of("graphite-bars.toml"), specimen, "third-60-20")
    (broke,) = truth_of(bench, "broke")
    (fracture,) = bench.named("fracture")
    assert fracture["verdict"] in ("gradual failure", "sudden break")
    assert 0.055 <= fracture["time_s"] - broke["time_s"] <= 0.200
    result = result_of(bench)
    assert result["peak_recovered_n"] == pytest.approx(broke["force_n"], rel=2e-3)
    assert stops(bench)


# 9 ---------------------------------------------------------------------------------------------------------------
@pytest.mark.parametrize(
    "fault",
    [{"kind": "freeze"}, {"kind": "stream-end"}, {"kind": "zeros"}],
    ids=["value freezes", "stream ends", "exact zeros"],
)
def test_9_cable_out(fault: dict[str, Any]) -> None:
    """Signal lost within 100 ms and never "broken"; stop, no return; interrupted, survived stress kept."""
    card = bars_of(faults=[at_force(276.0, **fault)], drive={"stop_latency_s": 0.15})
    bench = VirtualBench(frame_of(), card)
    lay(bench, bar(), strength_mpa=600.0)
    start(bench, method_of())
    assert bench.run_until(lambda: bench.closed, 60.0)
    assert bench.named("fracture") == []
    lost = bench.named("signal_lost")[0]
    struck = truth_of(bench, "fault")[0]
    assert lost["time_s"] - struck["time_s"] <= 0.1
    assert bench.state is State.SIGNAL_LOST
    assert bench.named("returned") == []
    closing = bench.named("run_closed")[-1]
    assert closing["interrupted"] and closing["verdict"].startswith("signal lost")
    assert query(bench)["force_n"] <= 276.0 + 28.3 * 0.25
    assert result_of(bench)["stress_survived_mpa"] >= 220.0


# 10 --------------------------------------------------------------------------------------------------------------
def test_10_reversed_bridge_is_a_wrong_sign_stop() -> None:
    card = bars_of(faults=[{"kind": "wrong-polarity"}], drive={"stop_latency_s": 0.15})
    bench = VirtualBench(frame_of(stop_latency_s=0.15), card)
    lay(bench, bar(), strength_mpa=900.0)
    warm(bench)
    bench.open_run(method_of(), bar(), FIXTURE)
    bench.run_to(bench.now_s + 3.0)
    bench.request(StartRun())
    assert bench.run_until(lambda: bench.closed, 60.0)
    assert bench.named("polarity_locked")
    assert abs(query(bench)["force_n"]) <= 65.0
    bench.request(Reset("Rig"))
    with pytest.raises(Refused, match="polarity"):
        bench.open_run(method_of(), bar("B-2"), FIXTURE)


def test_10_blocked_fixture_is_approached_slowly_enough() -> None:
    """Jog of 50 mm/min asked: clamped to 9.95 mm/min; force peak below 500 N on a blocked fixture of 20 kN/mm."""
    card = bars_of(faults=[{"kind": "blocked"}], drive={"stiffness_n_mm": 20_000.0, "stop_latency_s": 0.15})
    bench = VirtualBench(frame_of(gap_mm=1.0, stop_latency_s=0.15), card)
    lay(bench, bar())
    warm(bench)
    bench.request(Jog(5.0, 50.0))
    clamped = bench.named("speed_clamped")
    assert clamped and clamped[-1]["given_mm_min"] <= 9.96
    bench.run_until(lambda: bench.state is State.AT_REST or bool(bench.named("approach_touch")), 60.0)
    bench.run_to(bench.now_s + 1.0)
    assert query(bench)["speed_mm_s"] == 0.0
    assert query(bench)["force_n"] <= 500.0


def test_10_wrong_speed_unit_is_a_runaway_stop() -> None:
    """The drive takes mm/min for mm/s: STOP before 15 % of the expected break load."""
    frame = frame_of(stop_latency_s=0.15)
    card = bars_of(
        drive={"stop_latency_s": 0.15},
        faults=[{"kind": "speed-slip", "factor": 60.0, "after_contact_s": 0.1}],
    )
    bench = VirtualBench(frame, card)
    lay(bench, bar(), strength_mpa=900.0)
    start(bench, method_of())
    assert bench.run_until(lambda: bench.closed, 60.0)
    trips = [event for event in bench.named("limit") if event["severity"] == "stop"]
    assert trips, bench.events[-8:]
    commanded_n = next(e["value"] for e in [trips[0]])
    assert bench.named("fracture") == [] and commanded_n is not None
    expected_n = bench.core.pipeline.snapshot()["expected_n"] or 460.0
    assert query(bench)["force_n"] <= 0.7 * float(expected_n)


# 11 --------------------------------------------------------------------------------------------------------------
@pytest.mark.parametrize("rate_hz", [1000.0, 100.0])
def test_11_event_mix(rate_hz: float) -> None:
    """One slip, one pop-in, three glitches, one sudden break with ringing and residual load: all told apart."""
    faults = [
        {"kind": "slip", "percent": 5.0, "at_force_n": 150.0},
        {
            "kind": "pop-in",
            "percent": 12.0,
            "stiffness_factor": 0.85,
            "at_force_n": 230.0,
            "breaks_at_n": 420.0,
        },
        {"kind": "glitch", "size": 400.0, "samples": 1, "at_force_n": 300.0},
        {"kind": "glitch", "size": -300.0, "samples": 2 if rate_hz > 500 else 1, "at_force_n": 330.0},
        {"kind": "glitch", "size": -300.0, "samples": 1, "at_force_n": 360.0},
    ]
    card = bars_of(
        faults=faults,
        after_break={"ring_hz": 480.0, "ring_damping": 0.01, "residual_percent": 30.0, "residual_s": 0.4},
    )
    bench = VirtualBench(frame_of(rate_hz=rate_hz), card)
    lay(bench, bar(), strength_mpa=600.0)
    start(bench, method_of())
    assert bench.run_until(lambda: bench.closed, 60.0)
    names = [event["event"] for event in bench.events]
    assert names.count("glitch") == 3
    assert names.count("fracture") == 1
    partial = names.count("slip") + names.count("pop_in") + names.count("partial_drop")
    assert partial == 2
    if rate_hz > 500:
        assert names.count("slip") == 1 and names.count("pop_in") == 1
    (fracture,) = bench.named("fracture")
    assert fracture["verdict"] == "sudden break"
    assert fracture["delay_s"] <= (0.025 if rate_hz > 500 else 0.040)
    (broke,) = truth_of(bench, "broke")
    result = result_of(bench)
    assert result["peak_recovered_n"] == pytest.approx(broke["force_n"], rel=2e-3)
    assert (
        result["peak_raw_n"] < broke["force_n"] + 60.0 or result["peak_screened_n"] < broke["force_n"] + 5.0
    )
    assert bench.named("limit") == []
    states = [event["to"] for event in bench.named("state")]
    assert "broken? - still loaded" in states and "broken - unloaded" in states


# 13 --------------------------------------------------------------------------------------------------------------
def test_13_machine_not_stopping() -> None:
    """Stop accepted, motion goes on: alarm within 0.5 s, stop repeated, event with the run-on."""
    card = bars_of(faults=[{"kind": "stop-ignored", "after_contact_s": 0.5}])
    bench = VirtualBench(frame_of(), card)
    lay(bench, bar(), strength_mpa=200.0)
    start(bench, method_of())
    assert bench.run_until(lambda: bool(bench.named("stop_failed")), 60.0)
    first_s = next(event["time_s"] for event in bench.named("stop_sent") if event["reason"] != "touch")
    failed = bench.named("stop_failed")[0]
    assert failed["time_s"] - first_s <= 0.5
    assert failed["severity"] == "emergency"
    assert len([at_s for at_s in stops(bench) if at_s >= first_s]) >= 3


# 18 --------------------------------------------------------------------------------------------------------------
def test_18_write_stall_is_a_caution_then_a_controlled_stop() -> None:
    """30 s stall: caution after 10 s, no stop; 46 s: controlled stop before the ring (60 s) is full."""
    bench = VirtualBench(frame_of(rate_hz=50.0), bars_of())
    lay(bench, bar(), strength_mpa=2000.0)
    start(bench, method_of(speed_mm_min=0.06))
    assert bench.run_until(lambda: bench.state is State.LOADING, 60.0)
    for silent_s in (9.0, 11.0, 30.0):
        bench.stall(silent_s)
        bench.run_to(bench.now_s + 0.5)
    assert bench.state is State.LOADING
    assert [event["name"] for event in bench.named("fault")] == ["recorder_slow"]
    bench.stall(46.0)
    assert bench.state is State.STOPPED
    sent = len(stops(bench))
    assert sent
    bench.run_to(bench.now_s + 1.0)
    assert [event["name"] for event in bench.named("fault")] == ["recorder_slow", "recorder_lag"]
    assert len(stops(bench)) - sent < 12  # ten a second until it stands, not one a tick


# 19 --------------------------------------------------------------------------------------------------------------
def test_19_operator_unload_is_no_break() -> None:
    """At 60 % the operator backs off: verdict unloaded, never a break."""
    bench = VirtualBench(frame_of(), bars_of())
    lay(bench, bar(), strength_mpa=700.0)
    start(bench, method_of())
    assert bench.run_until(lambda: query(bench)["force_n"] > 276.0, 60.0)
    do(bench, **{"raise": True})  # from the machine's own panel
    assert bench.run_until(lambda: bench.closed, 30.0)
    assert bench.named("fracture") == []
    assert bench.named("run_closed")[-1]["verdict"] == "operator unload"
    assert bench.named("run_closed")[-1]["interrupted"]


# 20 --------------------------------------------------------------------------------------------------------------
def test_20_emergency_stop_needs_reset_and_new_start() -> None:
    bench = VirtualBench(frame_of(), bars_of())
    lay(bench, bar(), strength_mpa=700.0)
    start(bench, method_of())
    assert bench.run_until(lambda: query(bench)["force_n"] > 230.0, 60.0)
    do(bench, emergency_stop="pressed")
    assert bench.run_until(lambda: bench.closed, 10.0)
    assert bench.state is State.EMERGENCY_STOP
    force_n = query(bench)["force_n"]
    do(bench, emergency_stop="released")
    moves = len([1 for _, data in bench.sent if data.startswith((b"V", b"J", b"B"))])
    bench.run_to(bench.now_s + 2.0)
    with pytest.raises(Refused):
        bench.request(StartRun())
    bench.request(Reset("Rig"))
    bench.run_to(bench.now_s + 2.0)
    assert len([1 for _, data in bench.sent if data.startswith((b"V", b"J", b"B"))]) == moves
    assert query(bench)["speed_mm_s"] == 0.0
    assert query(bench)["force_n"] == pytest.approx(force_n, abs=5.0)


def test_stop_is_obeyed_in_every_state() -> None:
    """A stop request yields STOP bytes at once, at rest as well."""
    bench = VirtualBench(frame_of(rate_hz=200.0), bars_of())
    lay(bench, bar())
    warm(bench)
    for _ in range(3):
        before = len(stops(bench))
        bench.request(StopRequest("test"))
        assert len(stops(bench)) == before + 1
        bench.run_to(bench.now_s + 0.5)


def test_a_stopper_that_has_gone_ends_the_keep_alive() -> None:
    """The machine's own watchdog then stops it: silence stops."""
    bench = VirtualBench(frame_of(), bars_of())
    lay(bench, bar(), strength_mpa=700.0)
    start(bench, method_of())
    assert bench.run_until(lambda: bench.state is State.LOADING, 60.0)
    bench.stopper_alive = False
    bench.run_to(bench.now_s + 1.0)
    assert query(bench)["speed_mm_s"] == 0.0


def test_an_unclean_start_moves_nothing() -> None:
    bench = VirtualBench(frame_of(rate_hz=200.0), bars_of(), clean_start=False)
    lay(bench, bar())
    warm(bench)
    assert bench.state is State.UNKNOWN
    for request in (Jog(0.1, 1.0), ReturnCrosshead(0.1, 1.0), StartRun()):
        with pytest.raises(Refused):
            bench.request(request)
    with pytest.raises(Refused, match="unknown"):
        bench.open_run(method_of(), bar(), FIXTURE)
    bench.request(Reset("Rig", looked=True))
    bench.run_to(bench.now_s + 0.2)
    assert bench.state is State.AT_REST
    assert isinstance(OpenRun, type)
