"""The simulator card: what a virtual machine, its sensors and its bars are really like, and what goes wrong.

The frame card says what midspan believes of a machine; this card says what is true. Rows, rates, calibration,
commands and answers are the frame card's and are not repeated here.
"""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field, ValidationError, model_validator

from daq.cards.base import Card
from daq.cards.frame import Name, NotNegative, Positive
from daq.errors import CardError
from simulator.faults import AnyFault

Fraction = Annotated[float, Field(ge=0, le=1)]
Where = Literal["face", "surface", "edges", "volume"]


class Reference(Card):
    """Bar and spans for which a characteristic strength is stated. A rod: its diameter in thickness_mm."""

    support_span_mm: Positive
    load_span_mm: NotNegative = 0.0  # 0: 3-point
    width_mm: Positive
    thickness_mm: Positive


class Flaws(Card):
    """One population of flaws: Poisson-scattered over the tensile side, weaker ones rarer by a power law."""

    name: Name
    where: Where = "surface"
    weibull_modulus: Annotated[float, Field(ge=1, le=100)]
    strength_mpa: Positive  # characteristic (63.2 %) of the reference bar
    reference: Reference


class BarCard(Card):
    """The material, and the size of a bar that is mounted without sizes of its own."""

    section: Literal["rectangle", "circle", "tube"] = "rectangle"
    modulus_gpa: Annotated[float, Field(gt=0.1, le=1000)]
    poisson_ratio: Annotated[float, Field(ge=0, lt=0.5)] = 0.25
    width_mm: Positive | None = None  # rectangle only
    thickness_mm: Positive  # diameter of a rod or tube
    inner_diameter_mm: NotNegative = 0.0
    chamfer_mm: NotNegative = 0.0
    scatter_mm: NotNegative = 0.0  # half-width of the sizes' rectangular scatter
    flaws: tuple[Flaws, ...] = ()  # none: the bar never breaks

    @model_validator(mode="after")
    def _fits(self) -> BarCard:
        if (self.section == "rectangle") != (self.width_mm is not None):
            raise ValueError("width_mm belongs to a rectangle and only to a rectangle")
        if self.section == "tube" and any(flaws.where in ("volume", "edges") for flaws in self.flaws):
            raise ValueError("a tube takes flaws of its face or surface only")
        if self.section == "circle" and any(flaws.where == "edges" for flaws in self.flaws):
            raise ValueError("a rod has no edges to put flaws on")
        return self


class Contact(Card):
    """Between crosshead and bar."""

    fixture: Name | None = None  # as fitted; None: the frame card's first
    gap_mm: Positive | None = None  # start position to bar; None: the frame card's
    toe_mm: NotNegative = 0.0  # travel over which stiffness grows from 0 to full
    friction: Fraction = 0.0  # of rollers that do not roll
    load_offset_mm: float = 0.0  # load rollers off the middle, towards the right mark


class Drive(Card):
    """The crosshead, its controller, and everything elastic but the bar."""

    stiffness_n_mm: Positive = 10_000.0
    acceleration_mm_s2: Positive | None = None  # None: at once
    stop_latency_s: NotNegative = 0.15  # command to the begin of braking
    start_latency_s: NotNegative = 0.0
    speed_error_percent: Annotated[float, Field(gt=-100, le=1000)] = 0.0
    end_up_mm: float | None = None  # end switches; None: the frame card's travel
    end_down_mm: float | None = None
    hand_mm_min: Positive = 60.0  # raised from the machine's own panel to mount a bar
    watchdog: bool = True  # obeys the frame card's keep-alive


class ForceSensor(Card):
    """The cell and its amplifier, in newton."""

    time_constant_s: NotNegative = 0.0  # first-order
    noise: NotNegative = 0.0  # sigma, white
    hum: NotNegative = 0.0  # amplitude
    hum_hz: Positive = 50.0
    drift_per_s: float = 0.0
    lsb: NotNegative = 0.0  # 0: the channel's own count
    zero: float | None = None  # unloaded reading; None: the frame card's zero balance


class OtherSensor(Card):
    """Any other channel, in its own unit."""

    time_constant_s: NotNegative = 0.0
    noise: NotNegative = 0.0
    hum: NotNegative = 0.0
    hum_hz: Positive = 50.0
    drift_per_s: float = 0.0
    lsb: NotNegative = 0.0
    zero: float = 0.0  # also the constant of temperature and humidity


class AfterBreak(Card):
    """How the bar lets go."""

    kind: Literal["sudden", "gradual"] = "sudden"
    ring_hz: NotNegative = 250.0  # free ringing of the load train; 0: none
    ring_damping: Annotated[float, Field(gt=0, lt=1)] = 0.03
    residual_percent: Annotated[float, Field(ge=0, lt=100)] = 0.0
    residual_s: NotNegative = 0.0
    fall_s: Positive = 0.08  # gradual: time constant
    softening_percent: Annotated[float, Field(ge=0, lt=100)] = 0.0  # slope lost at the highest load
    softening_from_percent: Annotated[float, Field(ge=0, lt=100)] = 60.0


class Port(Card):
    """The electronics between converter and cable."""

    clock_error_ppm: Annotated[float, Field(ge=-10_000, le=10_000)] = 0.0
    batch_s: NotNegative = 0.0  # rows leave in batches: an adapter's latency timer
    counter_start: Annotated[int, Field(ge=0)] = 0


class SimulatorCard(Card):
    """One virtual machine."""

    card: Literal["simulator"]
    name: Name
    title: str = ""
    seed: Annotated[int, Field(ge=0, le=2**63 - 1)] = 1
    bar: BarCard
    contact: Contact = Contact()
    drive: Drive = Drive()
    force: ForceSensor = ForceSensor()
    position: OtherSensor = OtherSensor()
    deflection: OtherSensor = OtherSensor()  # sensor under the middle of the bar
    strain: OtherSensor = OtherSensor()  # gauge on the tensile face, between the load rollers
    temperature: OtherSensor = OtherSensor(zero=23.0)
    humidity: OtherSensor = OtherSensor(zero=45.0)
    after_break: AfterBreak = AfterBreak()
    port: Port = Port()
    faults: Annotated[tuple[AnyFault, ...], Field(max_length=200)] = ()


def load_simulator(path: Path) -> SimulatorCard:
    """Read a simulator card; raises CardError with one line per fault."""
    try:
        table = tomllib.loads(path.read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise CardError((f"{path}: cannot be read: {error}",)) from error
    return simulator_from(table, str(path))


def simulator_from(table: dict[str, object], source: str = "card") -> SimulatorCard:
    """A card from a parsed table."""
    try:
        return SimulatorCard.model_validate(_tuples(table))
    except ValidationError as error:
        lines = tuple(_line(source, fault["loc"], fault["msg"]) for fault in error.errors())
        raise CardError(lines) from error


def _line(source: str, where: tuple[int | str, ...], text: str) -> str:
    return f"{source}: {'.'.join(str(part) for part in where) or 'card'}: {text}"


def _tuples(value: object) -> object:
    """TOML arrays as the tuples that strict models want."""
    if isinstance(value, dict):
        return {key: _tuples(item) for key, item in value.items()}
    if isinstance(value, list):
        return tuple(_tuples(item) for item in value)
    return value
