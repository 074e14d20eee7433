"""The motion part of a frame card: what midspan may ask of the crosshead, in which words. Moves nothing."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from daq.cards.base import Card, Name, NotNegative, Positive, about

Timeout = Annotated[float, Field(gt=0, le=5)]
Words = Annotated[str, Field(min_length=1, max_length=64)]


class Command(Card):
    """A motion command and what the machine answers."""

    send: Annotated[
        str,
        Field(min_length=1, max_length=128),
        about(
            "",
            "what is sent, without line end; {speed_mm_min}, {distance_mm} or {rate_n_s} where they belong",
        ),
    ]
    reply: Annotated[
        str, Field(max_length=32), about("", "how the answer begins; empty: the machine does not answer")
    ] = ""
    timeout_s: Annotated[Timeout, about("s", "an answer that takes longer is a fault")] = 0.3


class KeepAlive(Card):
    """The machine's own watchdog: it stops when this is not sent for lapse_s."""

    send: Annotated[Words, about("", "what is sent, without line end")]
    reply: Annotated[str, Field(max_length=32), about("", "how the answer begins; empty: no answer")] = ""
    every_s: Annotated[float, Field(gt=0, le=1), about("s", "time between two")] = 0.1
    lapse_s: Annotated[
        float, Field(gt=0, le=5), about("s", "the machine stops by itself after this time without one")
    ] = 0.5


class StatusQuery(Card):
    """How the machine is asked for its status word: reply = prefix + letters, each of which must be known."""

    send: Annotated[Words, about("", "what is sent, without line end")]
    reply: Annotated[
        str, Field(min_length=1, max_length=32), about("", "how the answer begins; letters follow")
    ]
    every_s: Annotated[Timeout, about("s", "time between two questions")] = 0.1
    timeout_s: Annotated[Timeout, about("s", "an answer that takes longer is a fault")] = 0.3
    letters_ignored: Annotated[
        str, Field(max_length=32), about("", "letters that may stand in the word and mean nothing to midspan")
    ] = ""


class Motion(Card):
    """What midspan may ask the crosshead to do. Positive speed = towards the specimen (loading)."""

    link: Annotated[Name, about("", "link that carries the commands")]
    line_end: Annotated[str, Field(min_length=1, max_length=2), about("", "end of a command")] = "\r\n"
    speed_mm_min_min: Annotated[Positive, about("mm/min", "slowest speed of the drive")]
    speed_mm_min_max: Annotated[Positive, Field(le=10_000), about("mm/min", "fastest speed of the drive")]
    approach_mm_min: Annotated[Positive, about("mm/min", "speed towards the specimen before contact")] = 5.0
    return_mm_min: Annotated[Positive, about("mm/min", "speed away from the specimen")] = 20.0
    position_sign: Annotated[
        Literal[-1, 1], about("", "1: the position value grows towards the specimen; -1: it falls")
    ] = 1
    travel_mm_min: Annotated[float, about("mm", "lower end of the travel that midspan may use")] = -50.0
    travel_mm_max: Annotated[float, about("mm", "upper end of the travel that midspan may use")] = 50.0
    gap_mm: Annotated[NotNegative, Field(le=1000), about("mm", "from the start position to the specimen")] = (
        2.0
    )
    anvil_gap_mm: Annotated[NotNegative, Field(le=1000), about("mm", "from contact to the lower anvil")] = (
        10.0
    )
    stop_latency_s: Annotated[
        float, Field(gt=0, le=5), about("s", "from the stop command to standstill, p95 of the stop drill")
    ] = 0.15
    blocked_stiffness_n_mm: Annotated[
        Positive, about("N/mm", "stiffness of frame and blocked fixture; limits the approach speed")
    ] = 20_000.0
    backoff_mm: Annotated[NotNegative, Field(le=1000), about("mm", "back-off after a complete break")] = 2.0
    backoff_auto: Annotated[
        bool, about("", "back off by itself after a complete break; only with a passed stop drill")
    ] = False
    start: Annotated[Command, about("", "table: set a speed, {speed_mm_min}")]
    stop: Annotated[Command, about("", "table: bring the crosshead to rest; no numbers in it")]
    jog: Annotated[Command | None, about("", "table: move by {distance_mm} at {speed_mm_min}")] = None
    retreat: Annotated[
        Command | None, about("", "table: move away from the specimen by {distance_mm} at {speed_mm_min}")
    ] = None
    force_rate: Annotated[Command | None, about("", "table: the machine's own force loop, {rate_n_s}")] = None
    keep_alive: Annotated[
        KeepAlive | None,
        about("", "table: watchdog of the machine; left out: it does not stop if the computer dies"),
    ] = None
    status: Annotated[StatusQuery | None, about("", "table: question for the status word")] = None
