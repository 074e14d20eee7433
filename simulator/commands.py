"""The machine's ear: the frame card's command templates as patterns, and the letters of the status word."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import Enum
from string import Formatter

from daq.cards.frame import FrameCard, InputName

HEARD_BYTES_MAX = 4096  # of an unfinished command; a real controller's input buffer is no larger
NUMBER = r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"


class Verb(Enum):
    START = "start"
    STOP = "stop"
    JOG = "jog"
    RETREAT = "retreat"
    FORCE_RATE = "force rate"
    KEEP_ALIVE = "keep-alive"
    STATUS = "status"
    STREAM = "stream"  # the link's start command: data may flow
    UNKNOWN = "unknown"


@dataclass(frozen=True, slots=True)
class Heard:
    """One command as understood. numbers: by the template's field name."""

    verb: Verb
    numbers: Mapping[str, float] = field(default_factory=dict)
    reply: str = ""


def pattern_of(template: str) -> re.Pattern[str]:
    """A template such as V{speed_mm_min:+.3f} as a pattern; a repeated field holds one number."""
    out, seen = "", set()
    for literal, name, _, _ in Formatter().parse(template):
        out += re.escape(literal)
        if name is not None:
            out += f"(?P={name})" if name in seen else rf"\s*(?P<{name}>{NUMBER})"
            seen.add(name)
    return re.compile(out)


class Ear:
    """Bytes of one link in, commands out. Knows what this frame card's machine understands on this link."""

    def __init__(self, frame: FrameCard, link_number: int) -> None:
        link, motion = frame.links[link_number], frame.motion
        self._left = b""
        self._end = (motion.line_end if motion is not None else "\r\n").encode("latin-1")
        self._known: list[tuple[Verb, re.Pattern[str], str]] = []
        if link.start_command:
            self._known.append((Verb.STREAM, re.compile(re.escape(link.start_command.strip("\r\n"))), ""))
        if motion is None or motion.link != link.name:
            return
        for verb, command in (
            (Verb.STOP, motion.stop),
            (Verb.START, motion.start),
            (Verb.JOG, motion.jog),
            (Verb.RETREAT, motion.retreat),
            (Verb.FORCE_RATE, motion.force_rate),
            (Verb.KEEP_ALIVE, motion.keep_alive),
            (Verb.STATUS, motion.status),
        ):
            if command is not None:
                self._known.append((verb, pattern_of(command.send), command.reply))

    def feed(self, data: bytes) -> tuple[Heard, ...]:
        """Commands completed by these bytes."""
        *lines, left = (self._left + data).split(self._end)
        self._left = left[-HEARD_BYTES_MAX:]
        return tuple(self._understand(line.decode("latin-1")) for line in lines if line)

    def _understand(self, text: str) -> Heard:
        for verb, pattern, reply in self._known:
            match = pattern.fullmatch(text)
            if match is not None:
                return Heard(verb, {name: float(number) for name, number in match.groupdict().items()}, reply)
        return Heard(Verb.UNKNOWN)


def status_letters(frame: FrameCard, active: Mapping[InputName, bool]) -> str:
    """Letters of the status word, the harmless ones included (they stand for 'alive' and the like)."""
    letters = frame.motion.status.letters_ignored if frame.motion is not None and frame.motion.status else ""
    for item in frame.inputs:
        if item.source == "reply" and active.get(item.name, False) == item.active_when:
            letters += item.letter
    return letters


def signed_distance_mm(numbers: Mapping[str, float]) -> float:
    """Of a jog: away from the bar when either number is negative."""
    distance_mm, speed = numbers.get("distance_mm", 0.0), numbers.get("speed_mm_min", 0.0)
    return -abs(distance_mm) if distance_mm < 0 or speed < 0 else distance_mm
