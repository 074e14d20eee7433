"""Misfortunes, as a card or the hands write them: what goes wrong, and when. Models only; nothing happens here.

A fault waits for its anchor (a time or a force), fires once (or once per bar with `every_bar`), and may last
`for_s`. Hands may fire one at once.
"""

from __future__ import annotations

from typing import Annotated, ClassVar, Literal, TypeAlias, get_args

from pydantic import Field, model_validator

from daq.cards.base import Card, Name, NotNegative, Positive, about

SensorKind = Literal["freeze", "zeros", "nan", "saturation", "wrong-polarity"]
WireKind = Literal["stream-end", "garbage", "reconnect"]
MachineKind = Literal["deaf", "stop-ignored", "mute", "drive-fault", "shield-open", "emergency-stop"]
LinkName = Annotated[Name | None, about("", "link that it hits; left out: every link")]
ChannelName = Annotated[
    str, Field(min_length=1, max_length=32), about("", "channel that it hits, by name or by role")
]
Drop = Annotated[float, Field(gt=0, lt=100), about("%", "share of the force that is lost")]


class Fault(Card):
    """When it happens: at most one anchor. Without any it is there from the beginning."""

    LASTS: ClassVar[bool] = True  # for_s has a meaning

    at_s: Annotated[NotNegative | None, about("s", "since power-on")] = None
    after_start_s: Annotated[
        NotNegative | None, about("s", "since the crosshead was first told to move towards this bar")
    ] = None
    after_contact_s: Annotated[NotNegative | None, about("s", "since this bar was first touched")] = None
    at_force_n: Annotated[Positive | None, about("N", "true force on the bar, rising")] = None
    bar: Annotated[
        Annotated[int, Field(ge=1)] | None, about("", "only while the bar mounted as this one is in")
    ] = None
    every_bar: Annotated[bool, about("", "once for every bar, instead of once")] = False
    for_s: Annotated[Positive | None, about("s", "how long it lasts; left out: until it is cleared")] = None

    @model_validator(mode="after")
    def _one_anchor(self) -> Fault:
        anchors = (self.at_s, self.after_start_s, self.after_contact_s, self.at_force_n)
        if sum(anchor is not None for anchor in anchors) > 1:
            raise ValueError("at most one of at_s, after_start_s, after_contact_s, at_force_n")
        if self.for_s is not None and not self.LASTS:
            raise ValueError("for_s has no meaning here: it happens at once and stays")
        return self


class Glitch(Fault):
    """A spike of some samples on one channel."""

    LASTS = False

    kind: Annotated[Literal["glitch"], about("", "what goes wrong")]
    channel: ChannelName = "force"
    size: Annotated[float, about("unit of the channel", "height of the spike, either sign")]
    samples: Annotated[int, Field(ge=1, le=1000), about("samples", "how many samples it hits")] = 1


class SensorFault(Fault):
    """One channel stuck, at exact zero counts, not a number, at its upper rail, or its wires reversed.

    Integers cannot say "not a number": there `nan` is the lower rail.
    """

    kind: Annotated[SensorKind, about("", "what goes wrong")]
    channel: ChannelName = "force"


class UnitSlip(Fault):
    """The channel suddenly speaks another unit: 0.001 (kN for N), 0.101972 (kgf), 0.224809 (lbf)."""

    kind: Annotated[Literal["unit-slip"], about("", "what goes wrong")]
    channel: ChannelName = "force"
    factor: Annotated[float, about("", "the value is multiplied by this")]


class Drift(Fault):
    """The channel walks away."""

    kind: Annotated[Literal["drift"], about("", "what goes wrong")]
    channel: ChannelName = "force"
    per_s: Annotated[float, about("unit of the channel per s", "how fast")]


class NoiseBurst(Fault):
    """More Gaussian noise."""

    kind: Annotated[Literal["noise"], about("", "what goes wrong")]
    channel: ChannelName = "force"
    sigma: Annotated[Positive, about("unit of the channel", "standard deviation of the added noise")]


class Rows(Fault):
    """Rows lost between machine and host, or sent twice."""

    kind: Annotated[Literal["dropped", "duplicated"], about("", "what goes wrong")]
    link: LinkName = None
    rows: Annotated[int, Field(ge=1, le=100_000), about("rows", "how many rows it hits")] = 1


class WireFault(Fault):
    """No rows any more; random bytes for rows; or the port vanishes and comes back after for_s."""

    kind: Annotated[WireKind, about("", "what goes wrong")]
    link: LinkName = None


class MachineFault(Fault):
    """deaf: STOP unheard. stop-ignored: STOP answered, motion goes on. mute: no answers. Others: inputs."""

    kind: Annotated[MachineKind, about("", "what goes wrong")]


class SpeedSlip(Fault):
    """The drive runs at a multiple of what it is told from now on: 60 is mm/s taken for mm/min."""

    kind: Annotated[Literal["speed-slip"], about("", "what goes wrong")]
    factor: Annotated[Positive, about("", "the speed is multiplied by this")]


class Slip(Fault):
    """The bar or a roller shifts: the force drops, the stiffness stays."""

    LASTS = False

    kind: Annotated[Literal["slip"], about("", "what goes wrong")]
    percent: Drop


class PopIn(Fault):
    """An arrested crack: the force drops and the bar is softer from then on."""

    LASTS = False

    kind: Annotated[Literal["pop-in"], about("", "what goes wrong")]
    percent: Drop
    stiffness_factor: Annotated[
        float, Field(gt=0, le=1), about("", "the stiffness of the bar is multiplied by this")
    ]
    breaks_at_n: Annotated[
        Positive | None, about("N", "where the bar then ends for good; left out: where its flaw says")
    ] = None


class Fixturing(Fault):
    """What is in the fixture instead of a bar: nothing, or something that does not give."""

    LASTS = False

    kind: Annotated[Literal["no-specimen", "blocked"], about("", "what goes wrong")]
    stiffness_n_mm: Annotated[Positive, about("N/mm", "of the whole load train when blocked")] = 20_000.0


class HalvesLeft(Fault):
    """A piece rests on the fixture and is weighed by a cell under the supports."""

    kind: Annotated[Literal["halves-left"], about("", "what goes wrong")]
    force_n: Annotated[Positive, about("N", "weight of the piece")]


AnyFault: TypeAlias = Annotated[
    Glitch
    | SensorFault
    | UnitSlip
    | Drift
    | NoiseBurst
    | Rows
    | WireFault
    | MachineFault
    | SpeedSlip
    | Slip
    | PopIn
    | Fixturing
    | HalvesLeft,
    Field(discriminator="kind"),
]
MODELS: tuple[type[Fault], ...] = get_args(get_args(AnyFault)[0])
KINDS: dict[str, type[Fault]] = {
    kind: model for model in MODELS for kind in get_args(model.model_fields["kind"].annotation)
}
