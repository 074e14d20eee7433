"""The virtual wire: same seed, same bytes; any reading gives the same; speed, loss and troubles are the cable's."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.cards.load import load_frame
from drivers.registry import decoder_for
from simulator.card import load_simulator, simulator_from
from simulator.doc import simulator_markdown
from simulator.hands import FAULT, Hands
from simulator.schedule import Schedule
from simulator.specimen import InHand
from simulator.virtual import VirtualWire
from simulator.wire import _shipped

BAR = InHand(number="B-1", strength_mpa=60.0)
TALK = (
    (0.10, b"V+6.000\r\n"),
    (0.30, b"K\r\n"),
    (0.31, b"?\r\n"),
    (0.60, b"K\r\n"),
    (0.9003, b"K\r\n"),
    (1.2, b"K\r\n?\r\n"),
    (1.45, b"S\r\n"),
    (1.5, b"rubbish\r\n"),
)
NOISY = {"noise": 0.15, "hum": 0.3, "time_constant_s": 0.004}


def talk(wire: VirtualWire, stops: list[float], until_s: float = 2.0) -> list[tuple[float, bytes]]:
    """Speak the script and read at these moments."""
    out, said = [], list(TALK)
    for stop_s in [*sorted(stop for stop in stops if stop < until_s), until_s]:
        while said and said[0][0] <= stop_s:
            at_s, data = said.pop(0)
            out += wire.read(at_s)
            wire.write(data, at_s)
        out += wire.read(stop_s)
    return out


def decode(frame, arrivals):
    decoder, blocks, replies, rejected = decoder_for(frame, 0), [], [], {}
    for at_s, data in arrivals:
        decoded = decoder.feed(data, at_s)
        blocks += [(block.gap_samples, block.counts) for block in decoded.blocks]
        replies += decoded.replies
        for reason, rows in decoded.rejected.items():
            rejected[reason] = rejected.get(reason, 0) + rows
    return blocks, replies, rejected


@pytest.fixture
def make(make_frame, make_card):
    def build(frame="kiln-lane-a", bar=BAR, link=None, **parts):
        parts.setdefault("contact", {"gap_mm": 0.02, "toe_mm": 0.005})
        parts.setdefault("force", NOISY)
        return VirtualWire(make_frame(frame, **(link or {})), make_card(**parts), bar)

    return build


def test_same_seed_same_bytes_and_another_seed_other_bytes(make):
    first, again, other = (talk(make(seed=seed), []) for seed in (3, 3, 4))
    assert first == again
    assert b"".join(data for _, data in first) != b"".join(data for _, data in other)


class Script:
    """One machine whose bytes are known when it is read at the end only."""

    def __init__(self, shipped) -> None:
        self.frame = load_frame(shipped / "kiln-lane-a.toml")
        self.card = simulator_from(
            {
                "card": "simulator",
                "name": "cut",
                "bar": {"modulus_gpa": 300.0, "width_mm": 4.0, "thickness_mm": 3.0},
                "force": NOISY,
                "contact": {"gap_mm": 0.02, "toe_mm": 0.005},
                "faults": [
                    {"kind": "glitch", "size": 400.0, "at_s": 0.7},
                    {"kind": "dropped", "rows": 3, "at_s": 1.1},
                ],
            }
        )
        self.expected = self.read([])

    def read(self, stops: list[float]) -> list[tuple[float, bytes]]:
        return talk(VirtualWire(self.frame, self.card, BAR), stops)


@pytest.fixture(scope="module")
def script(shipped) -> Script:
    return Script(shipped)


@settings(deadline=None, max_examples=25)
@given(stops=st.lists(st.floats(0, 2), max_size=30))
def test_however_it_is_read_the_bytes_are_the_same(script, stops):
    """Rows made ahead and taken back when a command comes leave no trace."""
    for (at_s, data), (other_s, other) in zip(script.read(stops), script.expected, strict=True):
        assert (at_s, data) == (other_s, other)


def test_the_machine_answers_in_the_words_of_the_card(make, make_frame):
    _, replies, rejected = decode(make_frame(), talk(make(), []))
    assert replies == [b"OK V", b"OK K", b"ST=RM", b"OK K", b"OK K", b"OK K", b"ST=RM", b"OK S", b"??"]
    assert rejected == {}


def test_bytes_take_the_time_of_the_line(make):
    """10 bits a byte at 460800 baud; rows stand a millisecond apart."""
    arrivals = make(force={}).read(0.5)
    sent_s = np.arange(len(arrivals)) * 1e-3
    line_s = np.array([len(data) for _, data in arrivals]) * 10 / 460_800
    assert [at_s for at_s, _ in arrivals] == pytest.approx(sent_s + line_s, abs=1e-9)


def test_a_line_that_is_too_slow_loses_rows_and_counts_them(make):
    wire = make(link={"speed_baud": 115_200})
    wire.read(20.0)
    counts = wire.counts()
    assert counts["rows_overrun"] > 1000
    assert counts["rows_sent"] + counts["rows_overrun"] == counts["rows_made"] == 20_001


def test_rows_may_leave_in_batches(make):
    arrivals = make(electronics={"batch_s": 0.016}, force={}).read(1.0)
    assert max(np.diff([at_s for at_s, _ in arrivals])) > 0.006
    assert len(arrivals) >= 990


def test_a_machine_may_wait_for_its_start_command(make):
    wire = make(link={"start_command": "GO"})
    assert wire.read(0.5) == []
    wire.write(b"GO\r\n", 0.5)
    assert 495 <= len(wire.read(1.0)) <= 501


def test_packets_carry_counts_and_inputs(make, make_frame):
    """kiln-lane-b: int24 force of 1.5 mN, status byte, replies between packets."""
    wire = make("kiln-lane-b", contact={"gap_mm": 0.02}, force={}, drive={"watchdog": False})
    frame = make_frame("kiln-lane-b")
    wire.write(b"MOVE +6.0000\r\n", 0.5)
    arrivals = wire.read(0.75)
    Hands(wire, truthful=False).do(b'{"shield": "open"}')
    arrivals += wire.read(1.5)
    decoder, inputs, forces, replies = decoder_for(frame, 0), [], [], []
    for at_s, data in arrivals:
        decoded = decoder.feed(data, at_s)
        inputs += [(sample.name, sample.active) for sample in decoded.inputs]
        replies += decoded.replies
        forces += [block.counts[:, 0] * 0.0015 for block in decoded.blocks]
    assert replies == [b"ok move"]
    assert ("moving", True) in inputs
    assert inputs.index(("shield_open", True)) < len(inputs) - 1 - inputs[::-1].index(("moving", False))
    assert np.concatenate(forces)[-1] == pytest.approx(wire.machine.force_n + 11.0, abs=1e-3)


def test_two_rates_of_a_seed_are_the_same_machine(make):
    slow, fast = make(link={"rate_hz": 100.0}, force={}), make(force={})
    for wire in (slow, fast):
        wire.write(b"V+6.000\r\n", 0.1)
        wire.read(0.55)
    assert slow.machine.position_mm == fast.machine.position_mm


# --- troubles of the cable ------------------------------------------------------------------------------


def test_dropped_rows_are_gaps_and_duplicated_rows_are_known(make, make_frame):
    faults = ({"kind": "dropped", "rows": 7, "at_s": 0.2}, {"kind": "duplicated", "rows": 4, "at_s": 0.4})
    blocks, _, rejected = decode(make_frame(), make(faults=faults).read(0.6))
    assert [gap for gap, _ in blocks if gap] == [7]
    assert rejected == {"duplicate": 4}


def test_garbage_is_rejected_and_the_stream_comes_back(make, make_frame):
    wire = make(faults=({"kind": "garbage", "at_s": 0.2, "for_s": 0.1},))
    blocks, _, _ = decode(make_frame(), wire.read(0.6))
    assert sum(len(counts) for _, counts in blocks) == pytest.approx(500, abs=3)
    assert sum(gap for gap, _ in blocks) == pytest.approx(100, abs=3)


@pytest.mark.parametrize("kind", ["stream-end", "reconnect"])
def test_an_end_of_the_stream_is_silence(make, kind):
    wire = make(faults=({"kind": kind, "at_s": 0.2, "for_s": 0.3},))
    arrivals = [at_s for at_s, _ in wire.read(0.3)]
    assert wire.connected() == (kind == "stream-end")
    wire.write(b"?\r\n", 0.3)
    arrivals += [at_s for at_s, _ in wire.read(1.0)]
    assert wire.connected()
    assert wire.bytes_lost == (3 if kind == "reconnect" else 0)
    gaps = np.diff(list(arrivals))
    assert gaps.max() == pytest.approx(0.1 if kind == "stream-end" else 0.3, abs=0.21)
    assert arrivals[-1] > 0.99


# --- schedule and hands ---------------------------------------------------------------------------------


def fault(**fields):
    return FAULT.validate_json(json.dumps({"kind": "glitch", "size": 1.0, **fields}))


def test_a_schedule_waits_for_its_anchor():
    schedule = Schedule(
        [fault(at_s=1.0), fault(after_start_s=2.0), fault(after_contact_s=0.5), fault(at_force_n=9.0)]
    )
    schedule.mounted()
    assert (schedule.next_s(), schedule.next_force_n()) == (1.0, 9.0)
    assert len(schedule.due(1.0, 0.0)) == 1
    assert schedule.next_s() == float("inf")
    schedule.started(10.0)
    assert schedule.next_s() == 12.0
    schedule.touched(10.2)
    assert schedule.next_s() == 10.7
    assert len(schedule.due(20.0, 9.0)) == 3
    assert (schedule.next_s(), schedule.next_force_n()) == (float("inf"), float("inf"))


def test_a_fault_of_one_bar_and_a_fault_of_every_bar():
    schedule = Schedule([fault(bar=2, after_start_s=1.0), fault(every_bar=True, at_force_n=5.0)])
    seen = []
    for number in (1, 2, 3):
        schedule.mounted()
        schedule.started(float(number))
        seen.append(len(schedule.due(number + 1.0, 0.0)) + len(schedule.due(-1.0, 5.0)))
    assert seen == [1, 2, 1]


def test_two_anchors_are_refused():
    with pytest.raises(ValueError, match="at most one"):
        fault(at_s=1.0, at_force_n=5.0)


def test_what_happens_at_once_does_not_last():
    with pytest.raises(ValueError, match="for_s has no meaning"):
        fault(for_s=1.0)


def test_hands_do_what_they_are_told(make):
    wire = make(bar=None)
    hands = Hands(wire, truthful=True)
    wire.read(0.1)
    assert hands.do(b'{"mount": {"number": "A-1", "strength_mpa": 50}}') == {"mounted": "A-1"}
    assert hands.do(b'{"shield": "open"}') == {"shield": "open"}
    assert wire.machine.inputs()["shield_open"]
    assert hands.do(b'{"fault": {"kind": "emergency-stop"}}') == {"fault": "emergency-stop"}
    assert hands.do(b'{"clear": true}') == {"cleared": True}
    assert not any(wire.machine.inputs().values())
    truth = hands.do(b'{"query": true}')
    assert (truth["specimen"], truth["broken"], truth["force_n"]) == ("A-1", False, 0.0)
    assert Hands(wire, truthful=False).do(b'{"query": true}') == {"refused": "no truth file was asked for"}


@pytest.mark.parametrize(
    "line",
    [
        b"",
        b"[]",
        b"{",
        b'{"a": 1, "b": 2}',
        b'{"mount": {"number": "../x"}}',
        b'{"mount": null}',
        b'{"fault": {"kind": "glitch"}}',
        b'{"fault": {"kind": "glitch", "size": 1, "channel": "nothing"}}',
        b'{"shield": "ajar"}',
        b'{"query": [1]}',
        b'{"dance": true}',
        b"\xff\xfe",
        b"[" * 5000,
        b" " * 10_000,
    ],
)
def test_hands_refuse_what_they_do_not_understand(make, line):
    assert "refused" in Hands(make(), truthful=True).do(line)


def test_the_page_about_simulator_cards_is_fresh():
    page = Path(__file__).parents[2] / "docs" / "simulator.md"
    assert page.read_text(encoding="utf-8") == simulator_markdown(), (
        "python -m simulator.doc > docs/simulator.md"
    )


def test_shipped_cards_load_and_play(shipped):
    """Every example card is complete."""
    frames = [load_frame(shipped / f"kiln-lane-{lane}.toml") for lane in ("a", "b", "demo")]
    folder = _shipped("alumina.toml").parent
    for path in sorted(folder.glob("*.toml")):
        card = load_simulator(path)
        fitting = [f for f in frames if card.contact.fixture in [fixture.name for fixture in f.fixtures]]
        wire = VirtualWire(fitting[0], card, InHand(number="A-1"))
        assert len(wire.read(0.2)) >= 199, path.name
