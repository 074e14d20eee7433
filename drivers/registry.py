"""Which decoder and encoder a link's card asks for: our own dialects, then installed ones (entry points)."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from importlib.metadata import entry_points
from typing import Protocol, cast

from daq.cards.frame import FrameCard
from daq.errors import CardError
from daq.stream.block import Floats
from drivers.decoded import Decoder
from drivers.lines import LinesDecoder, LinesEncoder
from drivers.packets import PacketsDecoder, PacketsEncoder
from drivers.plan import link_of

GROUP = "midspan.dialects"


class Encoder(Protocol):
    """The machine's side of a dialect, for the simulator and for tests."""

    def encode(
        self,
        counts: Floats,
        *,
        first_counter: int = 0,
        time_s: Floats | None = None,
        inputs: Mapping[str, bool] | None = None,
    ) -> bytes: ...

    def reply(self, text: bytes) -> bytes: ...


DECODERS: dict[str, Callable[[FrameCard, int], Decoder]] = {"lines": LinesDecoder, "packets": PacketsDecoder}
ENCODERS: dict[str, Callable[[FrameCard, int], Encoder]] = {"lines": LinesEncoder, "packets": PacketsEncoder}


def decoder_for(frame: FrameCard, link_number: int) -> Decoder:
    """The decoder of one link of a frame. Bad card -> CardError; nothing is opened."""
    dialect = link_of(frame, link_number).dialect
    make = DECODERS.get(dialect) or _installed(dialect)
    return make(frame, link_number)


def encoder_for(frame: FrameCard, link_number: int) -> Encoder:
    """The machine's side of one link of a frame."""
    dialect = link_of(frame, link_number).dialect
    if dialect not in ENCODERS:
        raise CardError((f"dialect = {dialect}: has no encoder: it cannot be simulated",))
    return ENCODERS[dialect](frame, link_number)


def _installed(dialect: str) -> Callable[[FrameCard, int], Decoder]:
    for entry in entry_points(group=GROUP):
        if entry.name == dialect:
            return cast(Callable[[FrameCard, int], Decoder], entry.load())
    known = ", ".join(sorted({*DECODERS, *entry_points(group=GROUP).names}))
    raise CardError((f"dialect = {dialect}: not installed: known here are {known}",))
