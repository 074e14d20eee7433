"""The frame card: everything that is true of one test machine, its wiring and its fixtures."""

from __future__ import annotations

import datetime as dt
from typing import Annotated, Literal

from pydantic import Field

from daq.cards.base import Card, FrameName, Name, NotNegative, Positive, about
from daq.cards.link import (
    Channel,
    Check,
    InputName,
    LinesDialect,
    Link,
    Number,
    PacketField,
    PacketsDialect,
    Role,
    StatusInput,
)
from daq.cards.motion import Command, KeepAlive, Motion, StatusQuery

__all__ = [
    "Cell",
    "Channel",
    "Check",
    "Command",
    "Compliance",
    "CompliancePoint",
    "Fixture",
    "FrameCard",
    "InputName",
    "KeepAlive",
    "LinesDialect",
    "Link",
    "Motion",
    "Name",
    "NotNegative",
    "Number",
    "PacketField",
    "PacketsDialect",
    "Positive",
    "Role",
    "StatusInput",
    "StatusQuery",
]


class Cell(Card):
    """Load cell and its amplifier."""

    serial: Annotated[str, Field(min_length=1, max_length=64), about("", "serial number of the cell")]
    capacity_n: Annotated[Positive, Field(le=100_000_000), about("N", "rated capacity")]
    safe_overload_percent: Annotated[
        float, Field(ge=100, le=1000), about("%", "safe overload, of the capacity; from the data sheet")
    ] = 150.0
    verified_min_n: Annotated[NotNegative, about("N", "lowest verified force")]
    verified_max_n: Annotated[Positive, about("N", "highest verified force")]
    verified_on: Annotated[dt.date | None, about("date", "day of the last verification")] = None
    verified_due: Annotated[dt.date | None, about("date", "next verification; a past day is a caution")] = (
        None
    )
    position: Annotated[Literal["crosshead", "supports"], about("", "where the cell sits")]
    time_constant_s: Annotated[
        Annotated[float, Field(ge=0, le=100)] | None,
        about("s", "first-order lag of the force chain; left out: lag not known"),
    ] = None
    bandwidth_hz: Annotated[Positive | None, about("Hz", "bandwidth of the amplifier")] = None
    noise_quiet_n: Annotated[NotNegative | None, about("N", "sigma of the quiet record")] = None
    moving_mass_kg: Annotated[
        Positive | None, about("kg", "mass that swings on the cell after a break; gives the ring frequency")
    ] = None
    zero_balance_n: Annotated[float, about("N", "gross reading of the clean, unloaded fixture")] = 0.0
    uncertainty_percent: Annotated[
        Positive, Field(le=100), about("%", "expanded uncertainty (k = 2) of the force reading")
    ] = 0.5


class CompliancePoint(Card):
    """One node of the compliance table."""

    force_n: Annotated[NotNegative, about("N", "force")]
    deflection_um: Annotated[float, about("um", "deflection of everything but the specimen")]


class Compliance(Card):
    """Force against deflection of everything but the specimen; monotone."""

    fixture: Annotated[Name, about("", "fixture it was measured with")]
    cell_serial: Annotated[str, about("", "cell it was measured with; another cell voids the table")]
    measured_on: Annotated[dt.date | None, about("date", "day of the compliance run")] = None
    points: Annotated[
        tuple[CompliancePoint, ...],
        Field(min_length=2, max_length=200),
        about("", "nodes: force rises from node to node, deflection never falls"),
    ]


class Fixture(Card):
    """A fixture as measured; spans come from here, never typed elsewhere."""

    name: Annotated[Name, about("", "name of the fixture; the series card says which one is fitted")]
    geometry: Annotated[Literal["3-point", "4-point"], about("", "three or four rollers")]
    support_span_mm: Annotated[Positive, Field(le=10_000), about("mm", "distance of the lower rollers")]
    load_span_mm: Annotated[NotNegative, about("mm", "distance of the upper rollers; 0 for 3-point")] = 0.0
    support_span_u_mm: Annotated[NotNegative, about("mm", "half-width of its uncertainty (rectangular)")] = (
        0.1
    )
    load_span_u_mm: Annotated[NotNegative, about("mm", "half-width of its uncertainty (rectangular)")] = 0.1
    roller_diameter_mm: Annotated[Positive, about("mm", "diameter of the rollers")] = 4.5
    rollers: Annotated[Literal["free", "fixed"], about("", "free to roll, or fixed")] = "free"
    rating_n: Annotated[Positive, about("N", "highest force the fixture may carry")]
    mass_on_cell_kg: Annotated[NotNegative, Field(le=10_000), about("kg", "mass of the part on the cell")] = (
        0.0
    )


class FrameCard(Card):
    """One test machine."""

    card: Annotated[Literal["frame"], about("", "kind of this card")]
    name: Annotated[FrameName, about("", "name of the frame in files and on the network")]
    title: Annotated[str, Field(max_length=120), about("", "one line for people")] = ""
    simulated: Annotated[bool, about("", "true: a virtual machine; its data are marked for ever")]
    cell: Annotated[Cell, about("", "table: the load cell")]
    links: Annotated[
        tuple[Link, ...], Field(min_length=1, max_length=8), about("", "list of tables: the ports")
    ]
    channels: Annotated[
        tuple[Channel, ...], Field(min_length=1, max_length=64), about("", "list of tables: what is measured")
    ]
    inputs: Annotated[
        tuple[StatusInput, ...],
        Field(max_length=16),
        about("", "list of tables: shield, emergency stop, ..."),
    ] = ()
    motion: Annotated[Motion | None, about("", "table: the crosshead; left out: monitor only")] = None
    fixtures: Annotated[
        tuple[Fixture, ...], Field(min_length=1, max_length=64), about("", "list of tables: the fixtures")
    ]
    compliance: Annotated[
        Compliance | None, about("", "table: compliance; left out: no modulus from the crosshead")
    ] = None
