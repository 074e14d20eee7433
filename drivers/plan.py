"""RowPlan: where in a decoded row of numbers what stands, derived from the frame card. Knows no bytes."""

from __future__ import annotations

from dataclasses import dataclass

from daq.cards.derived import byte_bits, input_link
from daq.cards.frame import FrameCard, InputName, Link, StatusInput
from daq.errors import CardError


@dataclass(frozen=True, slots=True)
class InputRule:
    """One status input: position in the row, bit of the integer there (None = whole value not zero)."""

    name: InputName
    position: int
    bit: int | None
    active_when: bool

    def active(self, value: float) -> bool:
        on = value != 0.0 if self.bit is None else bool(int(value) >> self.bit & 1)
        return on == self.active_when


@dataclass(frozen=True, slots=True)
class RowPlan:
    """A row is the channels in card order, then the special fields in any order."""

    channels: int
    counter: int | None = None
    modulus: int | None = None
    time: int | None = None
    time_unit_s: float = 1.0
    time_modulus: int | None = None
    inputs: tuple[InputRule, ...] = ()


def link_of(frame: FrameCard, link_number: int) -> Link:
    """The link of that number; a number that is not there is a card fault, not an index error."""
    if not 0 <= link_number < len(frame.links):
        raise CardError((f"frame {frame.name}: link number {link_number}: 0 to {len(frame.links) - 1}",))
    return frame.links[link_number]


def inputs_in_rows(frame: FrameCard, link_number: int) -> tuple[StatusInput, ...]:
    """Status inputs that travel in the rows of this link."""
    return tuple(
        status
        for status in frame.inputs
        if status.source == "column" and input_link(frame, status) == link_number
    )


def known_replies(frame: FrameCard, link: Link) -> tuple[bytes, ...]:
    """The beginnings of every reply the card knows on this link, longest first."""
    motion = frame.motion
    if motion is None or motion.link != link.name:
        return ()
    speakers = (
        motion.start,
        motion.stop,
        motion.jog,
        motion.retreat,
        motion.force_rate,
        motion.keep_alive,
        motion.status,
    )
    texts = {speaker.reply.encode("ascii", "replace") for speaker in speakers if speaker is not None}
    return tuple(sorted((text for text in texts if text), key=lambda text: (-len(text), text)))


def transmission_s(link: Link, row_bytes: int) -> float:
    """Time a row spends on a serial line at the declared speed; nothing on TCP."""
    return row_bytes * byte_bits(link) / link.speed_baud if link.kind == "serial" else 0.0
