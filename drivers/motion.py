"""MotionPort: what midspan asks of the crosshead as bytes, and what the machine's replies mean. Pure.

It remembers what was sent and not yet answered. It refuses to send a speed outside the card's range, to
repeat anything by itself, and to guess: a reply that is not in the card is a fact of its own, UnknownReply.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from enum import StrEnum
from typing import TypeAlias

from daq.cards.derived import input_link
from daq.cards.frame import Command, FrameCard, InputName, Motion
from daq.errors import CardError, Refused
from daq.watch.values import Move, MoveKind

PENDING_MAX = 64
"""Commands waiting for their reply. At 10 keep-alives and 10 queries a second, 5 s at most each, this
cannot fill unless the machine has long been silent; the oldest then counts as not answered."""


class CommandName(StrEnum):
    """The commands of a frame card's motion table."""

    START = "start"
    STOP = "stop"
    JOG = "jog"
    RETREAT = "retreat"
    FORCE_RATE = "force_rate"
    KEEP_ALIVE = "keep_alive"
    STATUS = "status"


@dataclass(frozen=True, slots=True)
class Acknowledged:
    command: CommandName


@dataclass(frozen=True, slots=True)
class NotAnswered:
    command: CommandName


@dataclass(frozen=True, slots=True)
class InputsKnown:
    """Every status input that the status word carries, active or not."""

    inputs: Mapping[InputName, bool]


@dataclass(frozen=True, slots=True)
class UnknownReply:
    text: str


MotionFact: TypeAlias = Acknowledged | NotAnswered | InputsKnown | UnknownReply


@dataclass(frozen=True, slots=True)
class _Words:
    """One command of the card: template, expected reply, and how long it may take."""

    send: str
    reply: bytes
    timeout_s: float


@dataclass(frozen=True, slots=True)
class _Pending:
    command: CommandName
    until_s: float


class MotionPort:
    """The motion side of one frame card."""

    def __init__(self, frame: FrameCard) -> None:
        motion = frame.motion
        if motion is None:
            raise CardError((f"frame {frame.name}: no [motion] table: monitor only, nothing can be sent",))
        self._motion = motion
        self._words = _words(motion)
        self._line_end = motion.line_end.encode("ascii", "replace")
        self._letters = {
            status.letter: (status.name, status.active_when)
            for status in frame.inputs
            if status.source == "reply"
        }
        self._ignored = frozenset(motion.status.letters_ignored) if motion.status else frozenset()
        self._pending: list[_Pending] = []
        self._dropped: list[CommandName] = []

    # -- sending: the bytes, remembered as sent at now_s

    def encode_move(self, move: Move, now_s: float) -> bytes:
        """The command for one move. Refused where the card has no such command or the speed is out of
        range."""
        command, numbers = self._command_of(move)
        wrong = self._faults(move, self._words[command].send)
        if wrong:
            raise Refused(move.kind.value, wrong)
        return self._encode(command, numbers, now_s)

    def encode_stop(self, now_s: float) -> bytes:
        return self._encode(CommandName.STOP, {}, now_s)

    def keep_alive(self, now_s: float) -> bytes:
        """Nothing where the card has no keep-alive."""
        return self._encode(CommandName.KEEP_ALIVE, {}, now_s) if self._motion.keep_alive else b""

    def query(self, now_s: float) -> bytes:
        """The question for the status word; nothing where the card has none."""
        return self._encode(CommandName.STATUS, {}, now_s) if self._motion.status else b""

    # -- hearing

    def reply(self, line: bytes, now_s: float) -> tuple[MotionFact, ...]:
        """What one reply line means. A late or second answer to a known command is an acknowledgement, no
        fault."""
        status = self._words.get(CommandName.STATUS)
        if status is not None and line.startswith(status.reply):
            self._settle(CommandName.STATUS)
            return (self._inputs(line, line[len(status.reply) :]),)
        command = self._answered(line)
        if command is None:
            return (UnknownReply(line.decode("ascii", "backslashreplace")),)
        self._settle(command)
        return (Acknowledged(command),)

    def expire(self, now_s: float) -> tuple[MotionFact, ...]:
        """Commands whose time for an answer has passed."""
        if not self._dropped and all(now_s <= waiting.until_s for waiting in self._pending):
            return ()
        late = [waiting.command for waiting in self._pending if not now_s <= waiting.until_s]
        self._pending = [waiting for waiting in self._pending if now_s <= waiting.until_s]
        late, self._dropped = self._dropped + late, []
        return tuple(NotAnswered(command) for command in late)

    # -- inside

    def _command_of(self, move: Move) -> tuple[CommandName, Mapping[str, float]]:
        motion = self._motion
        distance_mm = 0.0 if move.distance_mm is None else move.distance_mm
        numbers = {"speed_mm_min": move.speed_mm_min, "distance_mm": distance_mm}
        if move.rate_n_s is not None and motion.force_rate is not None:
            return CommandName.FORCE_RATE, {**numbers, "rate_n_s": move.rate_n_s}
        if move.rate_n_s is not None:
            raise Refused(move.kind.value, ("the frame card has no force_rate command",))
        if move.kind in (MoveKind.APPROACH, MoveKind.LOAD):
            return CommandName.START, numbers
        away = {"speed_mm_min": abs(move.speed_mm_min), "distance_mm": abs(distance_mm)}
        if move.kind is MoveKind.RETURN and motion.retreat is not None:
            return CommandName.RETREAT, away
        if motion.jog is not None:
            back = move.kind is MoveKind.RETURN or distance_mm < 0.0 or move.speed_mm_min < 0.0
            return CommandName.JOG, {**away, "distance_mm": -abs(distance_mm) if back else distance_mm}
        raise Refused(move.kind.value, ("the frame card has no command for it",))

    def _faults(self, move: Move, template: str) -> tuple[str, ...]:
        """What is wrong with the numbers this template sends; a number that is none is always wrong."""
        motion, wrong = self._motion, []
        speed = abs(move.speed_mm_min)
        in_range = motion.speed_mm_min_min <= speed <= motion.speed_mm_min_max
        if not in_range and ("{speed_mm_min" in template or not math.isfinite(speed)):
            allowed = f"{motion.speed_mm_min_min:g} to {motion.speed_mm_min_max:g} mm/min"
            wrong.append(f"speed {move.speed_mm_min:g} mm/min: the drive allows {allowed}")
        if "{distance_mm" in template and move.distance_mm is None:
            wrong.append("no distance given")
        if move.distance_mm is not None and not math.isfinite(move.distance_mm):
            wrong.append(f"distance {move.distance_mm} mm is not a number")
        if move.rate_n_s is not None and not math.isfinite(move.rate_n_s):
            wrong.append(f"rate {move.rate_n_s} N/s is not a number")
        return tuple(wrong)

    def _encode(self, command: CommandName, numbers: Mapping[str, float], now_s: float) -> bytes:
        words = self._words[command]
        if words.reply:
            if len(self._pending) >= PENDING_MAX:
                self._dropped.append(self._pending.pop(0).command)
            self._pending.append(_Pending(command, now_s + words.timeout_s))
        text = words.send.format(**numbers) if "{" in words.send or "}" in words.send else words.send
        return text.encode("ascii", "replace") + self._line_end

    def _answered(self, line: bytes) -> CommandName | None:
        """The command this line answers: longest matching reply first, then the one that waits longest."""
        known = self._words.items()
        fitting = [name for name, words in known if words.reply and line.startswith(words.reply)]
        if not fitting:
            return None
        longest = max(len(self._words[name].reply) for name in fitting)
        fitting = [name for name in fitting if len(self._words[name].reply) == longest]
        waiting = [each.command for each in self._pending if each.command in fitting]
        return waiting[0] if waiting else fitting[0]

    def _settle(self, command: CommandName) -> None:
        for place, waiting in enumerate(self._pending):
            if waiting.command is command:
                del self._pending[place]
                return

    def _inputs(self, line: bytes, word: bytes) -> MotionFact:
        letters = set(word.strip().decode("ascii", "backslashreplace"))
        if letters - self._letters.keys() - self._ignored:
            return UnknownReply(line.decode("ascii", "backslashreplace"))
        return InputsKnown(
            {name: (letter in letters) == when for letter, (name, when) in self._letters.items()}
        )


def modem_inputs(frame: FrameCard, link_number: int, lines: Mapping[str, bool]) -> dict[str, bool | None]:
    """Status inputs wired to the modem lines of one link; None = the line cannot be read."""
    found: dict[str, bool | None] = {}
    for status in frame.inputs:
        if status.source == "modem" and input_link(frame, status) == link_number:
            level = lines.get(status.line or "")
            found[status.name] = None if level is None else level == status.active_when
    return found


def _words(motion: Motion) -> dict[CommandName, _Words]:
    found: dict[CommandName, _Words] = {}
    commands: dict[CommandName, Command | None] = {
        CommandName.START: motion.start,
        CommandName.STOP: motion.stop,
        CommandName.JOG: motion.jog,
        CommandName.RETREAT: motion.retreat,
        CommandName.FORCE_RATE: motion.force_rate,
    }
    for name, command in commands.items():
        if command is not None:
            found[name] = _Words(command.send, _ascii(command.reply), command.timeout_s)
    if motion.keep_alive is not None:
        keep = motion.keep_alive
        found[CommandName.KEEP_ALIVE] = _Words(keep.send, _ascii(keep.reply), keep.lapse_s)
    if motion.status is not None:
        status = motion.status
        found[CommandName.STATUS] = _Words(status.send, _ascii(status.reply), status.timeout_s)
    return found


def _ascii(text: str) -> bytes:
    return text.encode("ascii", "replace")
