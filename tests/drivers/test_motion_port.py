"""Commands as bytes, and what the machine's replies mean."""

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from wire_frames import MOTION, lines_frame

from daq.errors import CardError, Refused
from daq.watch.values import Move, MoveKind
from drivers.motion import (
    PENDING_MAX,
    Acknowledged,
    CommandName,
    InputsKnown,
    MotionPort,
    NotAnswered,
    UnknownReply,
    modem_inputs,
)

INPUTS = [
    {"name": "shield_open", "source": "reply", "letter": "S"},
    {"name": "emergency_stop", "source": "reply", "letter": "e", "active_when": False},
    {"name": "drive_fault", "source": "modem", "line": "cts", "active_when": False},
]


def port(**motion) -> MotionPort:
    more = {key: value for key, value in {**MOTION, **motion}.items() if value is not None}
    return MotionPort(
        lines_frame({"prefix": "D"}, [{"name": "force", "column": 1}], motion=more, inputs=INPUTS)
    )


def move(
    kind: MoveKind, speed: float = 2.0, distance: float | None = None, rate: float | None = None
) -> Move:
    return Move(kind, speed, distance, rate)


@pytest.mark.parametrize(
    ("action", "sent"),
    [
        (move(MoveKind.APPROACH, 5.0), b"GO +5.000\r\n"),
        (move(MoveKind.LOAD, 0.5), b"GO +0.500\r\n"),
        (move(MoveKind.JOG, 3.0, -1.25), b"STEP -1.250 3.000\r\n"),
        (move(MoveKind.JOG, -3.0, 1.25), b"STEP -1.250 3.000\r\n"),
        (move(MoveKind.RETURN, 20.0, 2.0), b"BACK 20.000\r\n"),
        (move(MoveKind.RETURN, -20.0), b"BACK 20.000\r\n"),
    ],
)
def test_moves_become_the_cards_commands(action, sent):
    assert port().encode_move(action, 0.0) == sent


def test_stop_keep_alive_and_query_are_whole_lines():
    given = port(line_end="\r")
    assert given.encode_stop(0.0) == b"HALT\r"
    assert given.keep_alive(0.0) == b"LIVE\r"
    assert given.query(0.0) == b"?\r"
    bare = port(keep_alive=None, status=None)
    assert bare.keep_alive(0.0) == b"" and bare.query(0.0) == b""
    assert bare.expire(99.0) == ()


def test_a_return_without_a_retreat_command_is_a_step_away():
    given = port(retreat=None)
    assert given.encode_move(move(MoveKind.RETURN, 20.0, 2.0), 0.0) == b"STEP -2.000 20.000\r\n"


def test_the_machines_own_force_loop():
    given = port(force_rate={"send": "RATE {rate_n_s:.1f}", "reply": "ok rate"})
    assert given.encode_move(move(MoveKind.LOAD, 0.0, rate=50.0), 0.0) == b"RATE 50.0\r\n"


@pytest.mark.parametrize(
    ("action", "missing"),
    [
        (move(MoveKind.LOAD, 60.0), "the drive allows 0.1 to 50 mm/min"),
        (move(MoveKind.LOAD, 0.01), "the drive allows"),
        (move(MoveKind.LOAD, math.nan), "the drive allows"),
        (move(MoveKind.RETURN, math.inf), "the drive allows"),
        (move(MoveKind.LOAD, 1.0, rate=50.0), "no force_rate command"),
        (move(MoveKind.JOG, 1.0), "no distance"),
        (move(MoveKind.JOG, 1.0, math.nan), "not a number"),
    ],
)
def test_what_the_drive_cannot_do_is_never_sent(action, missing):
    given = port()
    with pytest.raises(Refused, match=missing):
        given.encode_move(action, 0.0)
    assert given.expire(99.0) == ()


def test_without_jog_and_retreat_there_is_no_way_back():
    given = port(jog=None, retreat=None)
    with pytest.raises(Refused, match="no command"):
        given.encode_move(move(MoveKind.RETURN, 20.0, 2.0), 0.0)


def test_a_frame_without_motion_has_no_port():
    with pytest.raises(CardError, match="monitor only"):
        MotionPort(lines_frame({}, [{"name": "force", "column": 1}]))


def test_a_reply_settles_its_command_and_silence_is_a_fact():
    given = port()
    given.encode_move(move(MoveKind.LOAD), 1.0)
    given.encode_stop(1.1)
    assert given.reply(b"ok halt now", 1.2) == (Acknowledged(CommandName.STOP),)
    assert given.expire(1.3) == ()  # exactly at its limit a command is not late
    assert given.expire(1.30001) == (NotAnswered(CommandName.START),)
    assert given.expire(9.0) == ()


def test_repeated_stops_each_want_an_answer():
    given = port()
    for attempt in range(3):
        given.encode_stop(0.1 * attempt)
    assert given.reply(b"ok halt", 0.25) == (Acknowledged(CommandName.STOP),)
    assert given.expire(0.65) == (NotAnswered(CommandName.STOP), NotAnswered(CommandName.STOP))


def test_an_answer_that_comes_late_or_twice_is_no_fault():
    assert port().reply(b"ok live", 5.0) == (Acknowledged(CommandName.KEEP_ALIVE),)


def test_a_command_that_has_no_reply_is_not_waited_for():
    given = port(stop={"send": "HALT"})
    given.encode_stop(0.0)
    assert given.expire(99.0) == ()


def test_the_longer_expected_reply_wins_over_its_own_beginning():
    given = port(stop={"send": "HALT", "reply": "ok"}, start={"send": "GO {speed_mm_min}", "reply": "ok go"})
    given.encode_stop(0.0)
    given.encode_move(move(MoveKind.LOAD), 0.0)
    assert given.reply(b"ok go", 0.1) == (Acknowledged(CommandName.START),)
    assert given.reply(b"ok", 0.1) == (Acknowledged(CommandName.STOP),)


@pytest.mark.parametrize(
    ("word", "inputs"),
    [
        (b"ST=", {"shield_open": False, "emergency_stop": True}),
        (b"ST=Re", {"shield_open": False, "emergency_stop": False}),
        (b"ST=SeR", {"shield_open": True, "emergency_stop": False}),
        (b"ST= S ", {"shield_open": True, "emergency_stop": True}),
    ],
)
def test_the_status_word(word, inputs):
    given = port()
    given.query(0.0)
    assert given.reply(word, 0.1) == (InputsKnown(inputs),)
    assert given.expire(9.0) == ()


@pytest.mark.parametrize("line", [b"ST=X", b"ST=SS\xff", b"fault 7", b"\xff\x00", b"", b"OK go"])
def test_what_the_card_does_not_know_is_an_unknown_reply(line):
    (fact,) = port().reply(line, 0.0)
    assert isinstance(fact, UnknownReply)


@given(
    lines=st.lists(
        st.one_of(st.binary(max_size=30), st.sampled_from((b"ok go", b"ok halt", b"ST=S"))), max_size=30
    )
)
@settings(max_examples=50, deadline=None)
def test_no_reply_raises_and_each_gives_one_fact(lines):
    given = port()
    for number, line in enumerate(lines):
        assert len(given.reply(line, float(number))) == 1


def test_the_table_of_what_waits_is_bounded():
    given = port()
    for _ in range(PENDING_MAX + 5):
        given.encode_stop(0.0)
    assert given.expire(0.0) == (NotAnswered(CommandName.STOP),) * 5
    assert given.expire(1.0) == (NotAnswered(CommandName.STOP),) * PENDING_MAX


def test_modem_lines_become_inputs_and_an_unreadable_one_is_unknown():
    frame = lines_frame({}, [{"name": "force", "column": 1}], inputs=INPUTS)
    assert modem_inputs(frame, 0, {"cts": True}) == {"drive_fault": False}
    assert modem_inputs(frame, 0, {"cts": False, "dsr": True}) == {"drive_fault": True}
    assert modem_inputs(frame, 0, {}) == {"drive_fault": None}
    assert modem_inputs(frame, 1, {"cts": True}) == {}
