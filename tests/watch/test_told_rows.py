"""The rest of the table of limits: rows that tell, refuse or clamp, and rows by another way than the usual one.

Which test passes each row of the limits, and which stays just inside:

| row | limit | tests |
|---|---|---|
| 1 to 4, 8 to 16, 25, 26, 33 | force, travel, run-on, signal, inputs, failed stop, time | test_limit_rows.ROWS_TRIED |
| 1, 4 | cautions at 80 % of the cell and at P99.9 | PAIRS here |
| 2 | cell locked after an overload | test_cell_check |
| 5 | wrong sign | test_limit_rows.ROWS_TRIED; blanking: test_flow, ringing bars |
| 6, 7 | touch; approach speed | PAIRS here; test_limit_rows, slowed way to the bar |
| 9, 10, 11 | without a position; stalled drive; force loop closed by midspan | PAIRS here |
| 14 | speed off by a fifth | PAIRS here; the other way: test_limit_rows.ROWS_TRIED |
| 15 | gap, silence, frozen | PAIRS here; test_still |
| 17 to 21 | noise, hum, drift, zero balance, tare under load | PAIRS here |
| 22, 23, 24 | glitches, rate out of its band, second look | PAIRS here |
| 27 | disk, recorder behind | PAIRS here; seconds: scenarios/test_job_scenarios, write stall |
| 28 | clock step | PAIRS here; bench/test_clocks |
| 29, 32 | temperature; verification overdue | no limit of the watch: results/remarks, cards/test_questions |
| 30 | operator absent | test_limit_rows, five minutes in contact |
| 31 | unknown state after an unclean end | PAIRS here |

`test_the_table_is_whole` holds this docstring to what is tried.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pytest

from daq.errors import Refused
from daq.watch.requests import FaultOver, StartRun, StopRequest
from daq.watch.values import State
from tests.watch.frames import frame, method, open_run
from tests.watch.rig import Machine, Rig
from tests.watch.test_limit_rows import P999_N, ROWS_TRIED, slow_drive, under_load

Seen = Callable[[Rig], bool]
QUIET_FRAME = {"motion__gap_mm": 0.02}


@dataclass(frozen=True)
class Pair:
    """seen: whether the row has spoken."""

    row: int
    what: str
    seen: Seen
    passes: Callable[[], Rig]
    stays: Callable[[], Rig]


def risen(to_n: float, strength_mpa: float = 700.0) -> Rig:
    """The load of a bar that does not break."""
    rig = Rig(frame(rate_hz=100.0, **QUIET_FRAME), Machine(gap_mm=0.01, strength_n=1e9))  # type: ignore[arg-type]
    rig.loading(method(expected__strength_mpa=strength_mpa, rate__speed_mm_min=2.0), 60.0)
    return rig.run_until(lambda: (rig.pipe.snapshot()["net_n"] or 0.0) > to_n, 30.0)  # type: ignore[operator]


def told(row: int) -> Seen:
    return lambda rig: row in rig.rows()


def emitted(name: str) -> Seen:
    return lambda rig: bool(rig.named(name))


def stopped_by(row: int) -> Seen:
    return lambda rig: row in rig.rows() and rig.pipe.state is State.STOPPED


def offset(force_n: float, seconds: float = 3.0, **card: object) -> Rig:
    """A run is opened with so much on the cell."""
    rig = Rig(frame(**QUIET_FRAME, **card), Machine(gap_mm=50.0))  # type: ignore[arg-type]
    rig.disturb = lambda t, force: force + force_n
    rig.run_for(0.3)
    rig.ask(open_run())
    return rig.run_for(seconds)


def refused_for(word: str) -> Seen:
    return lambda rig: any(word in str(event["reasons"]) for event in rig.named("tare_refused"))


def drifting(per_min_n: float) -> Rig:
    rig = Rig(frame(**QUIET_FRAME), Machine(gap_mm=50.0))  # type: ignore[arg-type]
    rig.disturb = lambda t, force: force + per_min_n / 60.0 * t
    rig.run_for(0.3)
    rig.ask(open_run())
    return rig.run_for(8.0)


def noisy_at_rest(times: float) -> Rig:
    rig = Rig(frame(**QUIET_FRAME), Machine(gap_mm=50.0), noise_n=0.15 * times)  # type: ignore[arg-type]
    rig.run_for(0.3)
    rig.ask(open_run())
    return rig.run_for(6.0)


def noisy_run(times: float) -> Rig:
    rig = under_load()
    rig.noise_n = 0.15 * times
    return rig.run_for(4.0)


def humming(amplitude_n: float, hum_hz: float = 50.0, rate_hz: float = 1000.0, rest_n: float = 0.15) -> Rig:
    """rest_n while the zero is taken, amplitude_n from loading on; 0.1 % of P50 is 0.463 N."""
    hum_n = [rest_n]
    rig = Rig(frame(rate_hz=rate_hz, **QUIET_FRAME), Machine(gap_mm=0.01, strength_n=1e9), noise_n=0.05)  # type: ignore[arg-type]
    rig.disturb = lambda t, force: force + hum_n[0] * float(np.sin(2 * np.pi * hum_hz * t))
    rig.loading(load_n=60.0)
    hum_n[0] = amplitude_n
    return rig.run_for(3.5)


def hum_at_rest(amplitude_n: float) -> Rig:
    """80 S/s: 50 Hz shows as 30 Hz."""
    rig = Rig(frame(rate_hz=80.0, **QUIET_FRAME), Machine(gap_mm=50.0), noise_n=0.05)  # type: ignore[arg-type]
    rig.disturb = lambda t, force: force + amplitude_n * float(np.sin(2 * np.pi * 50.0 * t))
    return rig.ready()


def glitches(count: int) -> Rig:
    rig = under_load()
    rig.samples_per_block = 1
    at_s = [rig.now_s + 0.2 * (n + 1) for n in range(count)]
    rig.disturb = lambda t, force: force + (80.0 if any(abs(t - at) < 4e-4 for at in at_s) else 0.0)
    return rig.run_for(1.5)


def rate_off(factor: float) -> Rig:
    """The machine holds the rate by itself, and holds another one."""
    card = frame(**QUIET_FRAME, motion__force_rate={"send": "RATE {rate_n_s}"})  # type: ignore[arg-type]
    rig = Rig(card, Machine(gap_mm=0.01, strength_n=1e9))
    rig.loading(method(rate={"mode": "force", "rate_n_s": 28.3, "loop": "frame"}), 60.0)
    rig.machine.speed_mm_s *= factor
    return rig.run_for(3.0)


def looked(stiffness_share: float) -> Rig:
    """The bar is as stiff as that share of the plan says; the machine's own compliance is known."""
    points = [{"force_n": 0.0, "deflection_um": 0.0}, {"force_n": 900.0, "deflection_um": 90.0}]
    table = {"fixture": "quarter", "cell_serial": "C-1", "points": points}
    bar = 5122.0 * stiffness_share  # N/mm, of the 4 x 3 bar at its loading rollers
    both = 1.0 / (1.0 / bar + 1.0 / 10_000.0)
    rig = Rig(
        frame(**QUIET_FRAME, compliance=table), Machine(gap_mm=0.01, strength_n=1e9, stiffness_n_mm=both)
    )  # type: ignore[arg-type]
    rig.loading(load_n=100.0)
    return rig.run_until(lambda: (rig.pipe.snapshot()["net_n"] or 0.0) > 232.0, 12.0)  # type: ignore[operator]


def touched(force_n: float) -> Rig:
    """Row 6: 3 N on a 1 kN cell."""
    rig = Rig(frame(motion__gap_mm=0.3), Machine(gap_mm=50.0)).started()
    rig.disturb = lambda t, force: force + force_n
    return rig.run_for(0.3)


def approached(asked_mm_min: float) -> Rig:
    card = frame(motion__approach_mm_min=asked_mm_min, motion__blocked_stiffness_n_mm=20_000.0)
    rig = Rig(card).ready()
    rig.ask(StartRun())
    return rig


def without_position(*, gap_mm: float = 0.01, **limits: object) -> Rig:
    rig = Rig(frame(position=False, motion__gap_mm=0.02), Machine(gap_mm=gap_mm, strength_n=1e9))
    return rig.started(method(limits__force_only_allowed=True, rate__speed_mm_min=2.0, **limits))


def blind_travel(travel_mm: float) -> Rig:
    """Row 11: 0.1 mm from contact by the set speeds."""
    rig = without_position(limits__travel_mm_max=0.1)
    rig.run_until(lambda: rig.pipe.state is State.SEATING, 10.0)
    start = rig.machine.at_mm
    return rig.run_until(lambda: rig.machine.at_mm - start > travel_mm or bool(rig.rows()), 10.0)


def blind_flat(share: float) -> Rig:
    rig = without_position()
    rig.run_until(
        lambda: rig.pipe.state is State.LOADING and (rig.pipe.snapshot()["net_n"] or 0) > 100.0, 10.0
    )  # type: ignore[operator]
    return giving_way(rig, share)


def giving_way(rig: Rig, share: float) -> Rig:
    """From here on the force rises with that share of the stiffness."""
    base_mm, force_n = rig.machine.at_mm, rig.machine.force_n
    rig.disturb = lambda t, force: force_n + share * 3370.0 * (rig.machine.at_mm - base_mm)
    return rig.run_for(3.0)


def looping(**limits: object) -> Rig:
    """Midspan closes the loop of the force: the speed is corrected twice a second."""
    rate = {"mode": "force", "rate_n_s": 28.3, "speed_mm_min": 0.4, "loop": "midspan"}
    rig = Rig(frame(**QUIET_FRAME), Machine(gap_mm=0.01, strength_n=1e9))  # type: ignore[arg-type]
    rig.loading(method(rate=rate, **limits), 60.0)
    rig.run_until(lambda: len(rig.named("speed_corrected")) >= 2, 8.0)
    assert rig.named("speed_corrected")
    return rig


def loop_flat(share: float) -> Rig:
    return giving_way(looping(), share)


def loop_travel(travel_mm: float) -> Rig:
    rig = looping(limits__travel_mm_max=0.06)
    contact = rig.pipe._core.run.contact_mm  # type: ignore[union-attr]
    return rig.run_until(lambda: rig.machine.at_mm - contact > travel_mm, 10.0)


def stalled(share: float, *, loop: bool) -> Rig:
    """The drive has been told and goes on at that share of its speed, whatever it is told later."""
    rig = looping() if loop else under_load()
    rig.machine.deaf = True
    rig.machine.speed_mm_s *= share
    return rig.run_for(6.0)


def gap(missing: int) -> Rig:
    rig = under_load()
    rig.skip(missing)
    return rig.run_for(0.05)


def silent(seconds: float) -> Rig:
    rig = under_load(silence_s=0.05)
    rig.samples_per_block, rig.silent = 1, True
    rig.run_for(seconds)
    rig.silent = False
    return rig.run_for(0.02)


def fault_at_rest(name: str, *, over: bool) -> Rig:
    rig = Rig(frame(**QUIET_FRAME)).run_for(0.3)  # type: ignore[arg-type]
    rig.fault(name, "3 % free")
    if over:
        rig.ask(FaultOver(name))
    return rig


def fault_loading(name: str) -> Rig:
    rig = under_load()
    rig.fault(name, "")
    return rig.run_for(0.05)


def blocked(word: str) -> Seen:
    def refused(rig: Rig) -> bool:
        try:
            rig.ask(open_run())
        except Refused as error:
            return any(word in line for line in error.missing)
        return False

    return refused


def at_start(*, clean: bool) -> Rig:
    return Rig(frame(**QUIET_FRAME), clean_start=clean).run_for(0.3)  # type: ignore[arg-type]


PAIRS = [
    Pair(1, "80 % of the cell", told(1), lambda: risen(810.0), lambda: risen(790.0)),
    Pair(
        4,
        "P99.9",
        emitted("no_break"),
        lambda: risen(P999_N + 6.0, strength_mpa=383.0),
        lambda: risen(P999_N - 6.0, strength_mpa=383.0),
    ),
    Pair(6, "touch", emitted("approach_touch"), lambda: touched(3.4), lambda: touched(2.6)),
    Pair(7, "approach", emitted("speed_clamped"), lambda: approached(10.0), lambda: approached(9.0)),
    Pair(
        9,
        "no position",
        stopped_by(9),
        lambda: without_position(gap_mm=50.0).run_for(14.0),
        lambda: without_position(gap_mm=50.0).run_for(11.0),
    ),
    Pair(10, "no position", stopped_by(10), lambda: blind_flat(0.02), lambda: blind_flat(0.2)),
    Pair(10, "midspan's loop", stopped_by(10), lambda: loop_flat(0.02), lambda: loop_flat(0.3)),
    Pair(
        10,
        "drive stands",
        stopped_by(10),
        lambda: stalled(0.0, loop=False),
        lambda: stalled(0.3, loop=False),
    ),
    Pair(
        10,
        "drive stands in midspan's loop",
        stopped_by(10),
        lambda: stalled(0.0, loop=True),
        lambda: stalled(0.5, loop=True),
    ),
    Pair(11, "no position", stopped_by(11), lambda: blind_travel(0.11), lambda: blind_travel(0.09)),
    Pair(11, "midspan's loop", stopped_by(11), lambda: loop_travel(0.062), lambda: loop_travel(0.058)),
    Pair(14, "speed", told(14), lambda: slow_drive(0.7), lambda: slow_drive(0.87)),
    Pair(
        14,
        "speed in midspan's loop",
        told(14),
        lambda: stalled(0.5, loop=True),
        lambda: looping().run_for(3.0),
    ),
    Pair(15, "gap", told(15), lambda: gap(6), lambda: gap(5)),
    Pair(15, "silence", told(15), lambda: silent(0.06), lambda: silent(0.04)),
    Pair(17, "at rest", refused_for("noise"), lambda: noisy_at_rest(3.6), lambda: noisy_at_rest(2.4)),
    Pair(17, "in a run", told(17), lambda: noisy_run(4.5), lambda: noisy_run(2.4)),
    Pair(18, "in a run", told(18), lambda: humming(0.52), lambda: humming(0.40)),
    Pair(18, "5 x quiet", told(18), lambda: humming(0.32, rest_n=0.05), lambda: humming(0.2, rest_n=0.05)),
    Pair(18, "60 Hz at 100 S/s", told(18), lambda: humming(0.55, 60.0, 100.0), lambda: humming(0.38, 60.0, 100.0)),
    Pair(18, "at rest", told(18), lambda: hum_at_rest(0.52), lambda: hum_at_rest(0.40)),
    Pair(19, "drift", refused_for("drift"), lambda: drifting(4.0), lambda: drifting(0.5)),
    Pair(20, "1 % of the cell", refused_for("gross force"), lambda: offset(11.0), lambda: offset(9.0)),
    Pair(20, "0.2 % of the cell", emitted("zero_moved"), lambda: offset(2.4), lambda: offset(1.6)),
    Pair(21, "load at the tare", refused_for("load on the fixture"), lambda: offset(30.0), lambda: offset(0.0)),
    Pair(22, "glitches", emitted("events_many"), lambda: glitches(4), lambda: glitches(3)),
    Pair(23, "rate", emitted("rate_out_of_band"), lambda: rate_off(0.72), lambda: rate_off(0.86)),
    Pair(24, "soft bar", emitted("second_look"), lambda: looked(0.82), lambda: looked(0.92)),
    Pair(24, "stiff bar", emitted("second_look"), lambda: looked(1.2), lambda: looked(1.08)),
    Pair(
        27,
        "too little room",
        blocked("too little room"),
        lambda: fault_at_rest("disk_low", over=False),
        lambda: fault_at_rest("disk_low", over=True),
    ),
    Pair(
        27,
        "recorder behind",
        lambda rig: rig.pipe.state is State.STOPPED,
        lambda: fault_loading("recorder_lag"),
        lambda: fault_loading("recorder_slow"),
    ),
    Pair(28, "clock step", emitted("fault"), lambda: fault_loading("clock_step"), under_load),
    Pair(31, "unclean end", blocked("unknown"), lambda: at_start(clean=False), lambda: at_start(clean=True)),
]  # fmt: skip


def name_of(pair: Pair) -> str:
    return f"row-{pair.row} {pair.what}"


@pytest.mark.slow
@pytest.mark.parametrize("pair", PAIRS, ids=name_of)
def test_the_row_speaks(pair: Pair) -> None:
    rig = pair.passes()
    assert pair.seen(rig), [(e.name, dict(e.fields)) for e in rig.events][-6:]


@pytest.mark.slow
@pytest.mark.parametrize("pair", PAIRS, ids=name_of)
def test_just_inside_it_does_not(pair: Pair) -> None:
    rig = pair.stays()
    assert not pair.seen(rig), [(e.name, dict(e.fields)) for e in rig.events][-6:]


def test_the_table_is_whole() -> None:
    """Each row of the limits stands in the docstring; what it says is tried here, is."""
    assert __doc__ is not None
    here, there = set(), set()
    for line in __doc__.splitlines():
        cells = [cell.strip() for cell in line.split("|")]
        if len(cells) < 4 or not cells[1][:1].isdigit():
            continue
        rows: set[int] = set()
        for part in cells[1].split(","):
            low, *high = (int(number) for number in re.findall(r"\d+", part))
            rows |= set(range(low, (high[0] if high else low) + 1))
        there |= rows
        here |= rows if "PAIRS here" in cells[3] else set()
    assert there == set(range(1, 33)) | {33}
    assert here == {pair.row for pair in PAIRS}
    assert {tried.row for tried in ROWS_TRIED} <= there | {0}


def test_hum_is_named_by_its_true_and_its_visible_frequency() -> None:
    (line,) = hum_at_rest(2.0).named("hum")
    assert (line["true_hz"], line["seen_hz"]) == (50.0, 30.0)
    assert float(line["amplitude_n"]) == pytest.approx(2.0, rel=0.05)  # type: ignore[arg-type]


def test_a_clock_step_stops_nothing() -> None:
    rig = fault_loading("clock_step")
    assert rig.pipe.state is State.LOADING and not [at for at in rig.stops() if at > rig.now_s - 0.2]
    rig.ask(StopRequest())
