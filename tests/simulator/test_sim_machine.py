"""The machine obeys, breaks and stops when physics and its controller say so, to the microsecond."""

from __future__ import annotations

import numpy as np
import pytest

from daq.cards.load import load_frame, load_series
from simulator.card import load_simulator
from simulator.commands import Ear, Heard, Verb
from simulator.machine import Machine
from simulator.specimen import InHand
from simulator.virtual import VirtualWire
from simulator.wire import Person
from simulator.wire import _shipped as shipped_card

BAR = InHand(number="B-1", width_mm=4.0, thickness_mm=3.0, strength_mpa=400.0)
SCALE_N, SCALE_MM = 0.016, 0.0001  # of kiln-lane-a
HALF_N, HALF_MM = SCALE_N * 0.5001, SCALE_MM * 0.5001


@pytest.fixture
def make(make_frame, make_card):
    def build(bar: InHand | None = BAR, frame: str = "kiln-lane-a", **parts) -> Machine:
        parts.setdefault("contact", {"gap_mm": 0.1})
        parts.setdefault("force", {"zero": 0.0})
        parts.setdefault("drive", {"watchdog": False})
        return Machine(make_frame(frame), make_card(**parts), bar)

    return build


def start(machine: Machine, speed_mm_min: float, now_s: float = 0.0) -> str | None:
    return machine.command(Heard(Verb.START, {"speed_mm_min": speed_mm_min}, "OK V"), now_s)


def stop(machine: Machine, now_s: float) -> str | None:
    return machine.command(Heard(Verb.STOP, {}, "OK S"), now_s)


def told(machine: Machine, what: str) -> list:
    return [truth for truth in machine.take_truths() if truth.what == what]


def test_force_rises_as_the_springs_in_series_say(make):
    """Bar of E 300 on 40/20 (bending 4050 N/mm, shear aside) against 10 kN/mm."""
    machine = make()
    start(machine, 6.0)
    (rows,) = machine.advance(1.4)
    force, position = rows.counts[:, 0] * SCALE_N, rows.counts[:, 1] * SCALE_MM
    bar = 4050 / (1 + 2.4 * 1.25 * (3 / 40) ** 2)
    whole = 1 / (1 / bar + 1 / 10_000)
    loaded = position > 0.1
    assert position == pytest.approx(0.1 * rows.time_s, abs=HALF_MM)
    assert force[loaded] == pytest.approx(whole * (0.1 * rows.time_s[loaded] - 0.1), abs=HALF_N)
    assert not force[~loaded].any()


def test_the_bar_breaks_at_the_force_of_its_flaw(make):
    machine = make()
    start(machine, 6.0)
    machine.run_to(5.0)
    (broke,) = told(machine, "broke")
    assert broke.fields["stress_mpa"] == pytest.approx(400.0)
    assert broke.fields["force_n"] == pytest.approx(480.0)  # sigma 4 b h^2/(3 L) on 40/20
    whole = 1 / (1 / (4050 / (1 + 2.4 * 1.25 * (3 / 40) ** 2)) + 1 / 10_000)
    assert broke.time_s == pytest.approx(1.0 + 480 / whole / 0.1, abs=1e-9)


def test_a_toe_costs_half_its_length(make):
    late, early = make(contact={"gap_mm": 0.1, "toe_mm": 0.05}), make()
    for machine in (late, early):
        start(machine, 6.0)
        machine.run_to(5.0)
    (after,), (before,) = told(late, "broke"), told(early, "broke")
    assert after.time_s - before.time_s == pytest.approx(0.025 / 0.1, abs=1e-9)


@pytest.mark.parametrize("latency_s", [0.0, 0.05, 0.15])
def test_run_on_is_the_declared_stop_latency(make, latency_s):
    machine = make(None, drive={"stop_latency_s": latency_s, "watchdog": False})
    start(machine, 5.0)
    assert stop(machine, 1.0) == "OK S"
    machine.run_to(1.0 + latency_s - 1e-6)
    assert machine.moving == (latency_s > 0)
    machine.run_to(2.0)
    assert not machine.moving
    assert machine.position_mm == pytest.approx(5 / 60 * (1.0 + latency_s), abs=1e-12)


def test_the_watchdog_stops_a_machine_that_hears_nothing(make):
    """kiln-lane-a: 0.5 s without K."""
    machine = make(None, drive={})
    start(machine, 6.0)
    for beat in range(1, 6):
        machine.command(Heard(Verb.KEEP_ALIVE, {}, "OK K"), beat * 0.1)
    machine.run_to(0.999)
    assert machine.moving
    machine.run_to(3.0)
    assert machine.position_mm == pytest.approx(0.1 * 1.0, abs=1e-12)
    (lapse,) = told(machine, "watchdog")
    assert lapse.time_s == pytest.approx(1.0, abs=1e-12)
    machine.command(Heard(Verb.KEEP_ALIVE, {}, "OK K"), 3.1)
    machine.run_to(4.0)
    assert not machine.moving, "a keep-alive must not restart anything"


@pytest.mark.parametrize(
    ("kind", "answer", "watchdog_helps"),
    [("deaf", None, True), ("stop-ignored", "OK S", False), ("mute", None, True)],
)
def test_a_machine_that_does_not_stop(make, kind, answer, watchdog_helps):
    machine = make(None, drive={}, faults=[{"kind": kind, "at_s": 0.1}])
    start(machine, 6.0)
    assert stop(machine, 0.2) == answer
    machine.run_to(0.4)
    assert machine.moving == (kind != "mute")
    machine.run_to(2.0)
    assert machine.moving != watchdog_helps
    machine.switch("emergency_stop", True)
    machine.run_to(2.1)
    assert not machine.moving, "what is hard-wired always acts"


@pytest.mark.parametrize("name", ["shield_open", "emergency_stop", "drive_fault"])
def test_a_switch_stops_and_nothing_restarts_by_itself(make, name):
    machine = make(None)
    start(machine, 6.0)
    machine.run_to(1.0)
    machine.switch(name, True)
    machine.run_to(1.5)
    assert machine.position_mm == pytest.approx(0.1)
    assert machine.inputs()[name]
    assert start(machine, 6.0, 1.6) == "NO"
    machine.switch(name, False)
    machine.run_to(3.0)
    assert machine.position_mm == pytest.approx(0.1)
    assert start(machine, 6.0, 3.0) == "OK V"
    assert machine.moving


def test_the_status_word_has_the_letters_of_the_card(make, make_frame):
    machine, ear = make(None), Ear(make_frame(), 0)
    (query,) = ear.feed(b"?\r\n")
    assert machine.command(query, 0.0) == "ST=R"
    start(machine, 6.0, 0.1)
    machine.run_to(0.2)
    assert machine.command(query, 0.2) == "ST=RM"
    machine.switch("shield_open", True)
    assert machine.command(query, 0.3) == "ST=RS"
    machine.switch("shield_open", False)
    start(machine, 60.0, 0.4)
    machine.run_to(30.0)
    assert machine.command(query, 30.0) == "ST=RL"


def test_commands_are_read_from_the_cards_templates(make_frame):
    ear = Ear(make_frame(), 0)
    heard = [
        *ear.feed(b"V+2.500\r"),
        *ear.feed(b"\nJ-0.500,20.000\r\nB0.4,20\r\nF+50.000\r\nK\r\nS\r\nV2,5\r\n"),
    ]
    assert [(item.verb, dict(item.numbers)) for item in heard] == [
        (Verb.START, {"speed_mm_min": 2.5}),
        (Verb.JOG, {"distance_mm": -0.5, "speed_mm_min": 20.0}),
        (Verb.RETREAT, {"distance_mm": 0.4, "speed_mm_min": 20.0}),
        (Verb.FORCE_RATE, {"rate_n_s": 50.0}),
        (Verb.KEEP_ALIVE, {}),
        (Verb.STOP, {}),
        (Verb.UNKNOWN, {}),
    ]
    assert heard[0].reply == "OK V"


def test_jog_and_retreat_go_their_distance(make):
    machine = make(None)
    machine.command(Heard(Verb.JOG, {"distance_mm": 0.5, "speed_mm_min": 6.0}, ""), 0.0)
    machine.run_to(6.0)
    assert machine.position_mm == 0.5
    machine.command(Heard(Verb.RETREAT, {"distance_mm": 0.7, "speed_mm_min": 6.0}, ""), 6.0)
    machine.run_to(20.0)
    assert machine.position_mm == pytest.approx(-0.2, abs=1e-12)


def test_the_force_loop_holds_its_rate_and_breaks_on_time(make):
    """Approach at 5 mm/min over the gap, then 100 N/s through toe and straight part."""
    machine = make(contact={"gap_mm": 0.1, "toe_mm": 0.01})
    machine.command(Heard(Verb.FORCE_RATE, {"rate_n_s": 100.0}, "OK F"), 0.0)
    (rows,) = machine.advance(10.0)
    truths = {truth.what: truth.time_s for truth in machine.take_truths()}
    assert truths["touched"] == pytest.approx(1.2)
    assert truths["broke"] - truths["touched"] == pytest.approx(4.8)
    loaded = (rows.time_s > 1.21) & (rows.time_s < 5.9)
    force = rows.counts[loaded, 0] * SCALE_N
    assert force == pytest.approx(100 * (rows.time_s[loaded] - 1.2), abs=HALF_N)


def test_the_force_loop_takes_over_in_contact_and_stops(make):
    machine = make()
    start(machine, 6.0)
    machine.run_to(1.1)
    force_n = machine.force_n
    machine.command(Heard(Verb.FORCE_RATE, {"rate_n_s": 50.0}, "OK F"), 1.1)
    machine.run_to(2.1)
    assert machine.force_n == pytest.approx(force_n + 50.0)
    stop(machine, 2.1)
    machine.run_to(3.0)
    assert machine.force_n == pytest.approx(force_n + 50.0 * 1.15)
    assert not machine.moving


def test_a_force_loop_asked_for_while_a_stop_is_under_way_begins_after_it(make):
    """The stop has its latency; the loop must neither undo it nor be undone by it."""
    machine = make()
    start(machine, 6.0)
    machine.run_to(1.1)
    stop(machine, 1.1)
    machine.command(Heard(Verb.FORCE_RATE, {"rate_n_s": 50.0}, "OK F"), 1.11)
    machine.run_to(1.2499)
    before_n = machine.force_n
    machine.run_to(2.25)
    assert machine.force_n == pytest.approx(before_n + 50.0, rel=2e-3)


def test_the_next_bar_waits_until_the_way_is_clear(make):
    machine = make()
    start(machine, 6.0)
    machine.run_to(3.0)
    stop(machine, 3.0)
    machine.run_to(3.5)
    assert machine.broken
    machine.mount(InHand(number="B-2", strength_mpa=300.0))
    assert machine.bar is None
    machine.run_to(4.5)
    assert machine.position_mm == 0.0, "raised from the machine's own panel"
    assert machine.bar is not None and machine.bar.number == "B-2"
    start(machine, 6.0, 5.0)
    machine.run_to(9.0)
    assert [truth.fields["specimen"] for truth in told(machine, "broke")] == ["B-1", "B-2"]


def test_a_blocked_fixture_and_an_empty_one(make):
    blocked = make(faults=[{"kind": "blocked", "stiffness_n_mm": 20000.0}])
    empty = make(faults=[{"kind": "no-specimen"}])
    for machine in (blocked, empty):
        start(machine, 6.0)
        machine.run_to(1.1)
    assert blocked.force_n == pytest.approx(20_000 * 0.01)
    assert empty.force_n == 0.0


def test_slip_and_pop_in(make):
    """A slip keeps the slope; a pop-in takes its share of the bar's stiffness."""
    faults = [
        {"kind": "slip", "at_force_n": 100.0, "percent": 5.0},
        {"kind": "pop-in", "at_force_n": 300.0, "percent": 12.0, "stiffness_factor": 0.85},
    ]
    machine = make(faults=faults)
    start(machine, 0.6)
    (rows,) = machine.advance(30.0)
    force = rows.counts[:, 0] * SCALE_N
    step = np.diff(force)
    drops = np.flatnonzero(step < -1)[:2]
    assert force[drops] == pytest.approx([100.0, 300.0], abs=0.05)
    assert force[drops + 1] == pytest.approx([95.0, 264.0], abs=0.05)
    slopes = [
        np.polyfit(rows.time_s[a:b], force[a:b], 1)[0] / 0.01
        for a, b in ((drops[0] - 1500, drops[0]), (drops[0] + 2, drops[1]), (drops[1] + 2, drops[1] + 3000))
    ]
    bar = 4050 / (1 + 2.4 * 1.25 * (3 / 40) ** 2)
    whole = [1 / (1 / (bar * share) + 1 / 10_000) for share in (1.0, 1.0, 0.85)]
    assert slopes == pytest.approx(whole, rel=2e-3)
    assert told(machine, "broke")[0].fields["force_n"] == pytest.approx(480.0)


def test_a_first_break_may_hold_and_the_second_ends_it(make):
    """Scenario of the tile: first break to 40 %, reload, second break below the first."""
    fault = {
        "kind": "pop-in",
        "at_force_n": 400.0,
        "percent": 60.0,
        "stiffness_factor": 0.5,
        "breaks_at_n": 200.0,
    }
    machine = make(faults=[fault])
    start(machine, 6.0)
    (rows,) = machine.advance(8.0)
    (broke,) = told(machine, "broke")
    assert broke.fields["force_n"] == pytest.approx(200.0)
    assert (rows.counts[:, 0] * SCALE_N).max() == pytest.approx(400.0, abs=2.0)


def test_halves_are_weighed_only_under_the_supports(make):
    halves = {"kind": "halves-left", "force_n": 2.6, "at_s": 0.5}
    supports = make(None, faults=[halves])
    crosshead = make(None, "kiln-lane-c", faults=[halves], force={"zero": 0.0, "lsb": 0.1})
    assert supports.advance(1.0)[0].counts[-1, 0] * SCALE_N == pytest.approx(2.6, abs=SCALE_N)
    assert crosshead.advance(1.0)[0].counts[-1, 0] == 0.0


def test_halves_may_be_taken_away(make):
    machine = make(None, faults=[{"kind": "halves-left", "force_n": 2.6, "at_s": 0.5, "for_s": 1.0}])
    (rows,) = machine.advance(2.0)
    loaded = rows.counts[:, 0] > 0
    assert rows.time_s[loaded] == pytest.approx(np.arange(501, 1501) * 1e-3)


def test_speed_errors_and_slips_of_the_drive(make):
    machine = make(None, drive={"speed_error_percent": 2.0}, faults=[{"kind": "speed-slip", "factor": 60.0}])
    start(machine, 0.5, 0.1)
    machine.run_to(0.3)
    assert machine.speed_mm_s == pytest.approx(0.5 * 1.02)


def test_the_bars_of_the_demonstration_break_three_to_five_seconds_after_contact(shipped):
    series = load_series(shipped / "demo-series.toml")
    frame, card = load_frame(shipped / "kiln-lane-demo.toml"), load_simulator(shipped_card("alumina.toml"))
    seconds = []
    for specimen in series.specimens:
        machine = Machine(frame, card, InHand.model_validate_json(specimen.model_dump_json()))
        for beat in range(80):
            machine.command(
                Heard(Verb.KEEP_ALIVE if beat else Verb.START, {"speed_mm_min": 2.0}, ""), beat * 0.3
            )
        truths = {truth.what: truth.time_s for truth in machine.take_truths()}
        seconds.append(truths["broke"] - truths["touched"])
    assert min(seconds) > 3.0 and max(seconds) < 5.0


def test_without_hands_a_person_puts_in_bar_after_bar(make_frame, make_card):
    population = {
        "name": "pores",
        "weibull_modulus": 12.0,
        "strength_mpa": 50.0,
        "reference": {"support_span_mm": 40.0, "load_span_mm": 20.0, "width_mm": 4.0, "thickness_mm": 3.0},
    }
    card = make_card(bar={"flaws": [population]}, contact={"gap_mm": 0.1}, drive={"watchdog": False})
    wire = VirtualWire(make_frame(), card)
    person = Person(wire)
    assert wire.machine.bar is not None and wire.machine.bar.number == "AUTO-001"
    for at_s, data in ((0.0, b"V+6.000\r\n"), (2.0, b"S\r\n"), (2.5, b"B1.000,60.000\r\n")):
        wire.read(at_s)
        wire.write(data, at_s)
        person.look(at_s)
    for at_s in (3.0, 4.0, 4.9, 5.1):
        wire.read(at_s)
        person.look(at_s)
    assert wire.machine.bar.number == "AUTO-002"
    assert not wire.machine.broken
