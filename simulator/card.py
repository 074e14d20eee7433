"""The simulator card: what a virtual machine, its sensors and its bars are really like, and what goes wrong.

The frame card says what midspan believes of a machine; this card says what is true. Rows, rates, calibration,
commands and answers are the frame card's and are not repeated here.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field, ValidationError, model_validator

from daq.cards.base import Card, Name, NotNegative, Positive, about
from daq.cards.faults import Fault, faults_of, raise_faults
from daq.cards.tree import read_tree
from simulator.faults import KINDS, AnyFault

Where = Literal["face", "surface", "edges", "volume"]
Percent = Annotated[float, Field(ge=0, lt=100)]


class Reference(Card):
    """The bar and spans for which a characteristic strength is stated."""

    support_span_mm: Annotated[Positive, about("mm", "distance of the lower rollers")]
    load_span_mm: Annotated[NotNegative, about("mm", "distance of the upper rollers; 0 for 3-point")] = 0.0
    width_mm: Annotated[Positive, about("mm", "width; of no meaning for a rod or tube")]
    thickness_mm: Annotated[Positive, about("mm", "in the loading direction; diameter of a rod or tube")]


class Flaws(Card):
    """One population of flaws: Poisson-scattered over the tensile side, weaker ones rarer by a power law."""

    name: Annotated[Name, about("", "name of the population, for the truth file")]
    where: Annotated[
        Where, about("", "tensile face, tensile face with both sides, the two tensile edges, or volume")
    ] = "surface"
    weibull_modulus: Annotated[float, Field(ge=1, le=100), about("", "Weibull modulus m")]
    strength_mpa: Annotated[Positive, about("MPa", "characteristic strength (63.2 %) of the reference bar")]
    reference: Annotated[Reference, about("", "table: the reference bar")]


class BarCard(Card):
    """The material, and the size of a bar that is mounted without sizes of its own."""

    section: Annotated[Literal["rectangle", "circle", "tube"], about("", "cross-section")] = "rectangle"
    modulus_gpa: Annotated[float, Field(gt=0.1, le=1000), about("GPa", "Young's modulus")]
    poisson_ratio: Annotated[float, Field(ge=0, lt=0.5), about("", "Poisson's ratio")] = 0.25
    width_mm: Annotated[Positive | None, about("mm", "width; a rectangle's only")] = None
    thickness_mm: Annotated[Positive, about("mm", "in the loading direction; diameter of a rod or tube")]
    inner_diameter_mm: Annotated[NotNegative, about("mm", "bore of a tube")] = 0.0
    chamfer_mm: Annotated[NotNegative, about("mm", "leg of the four 45-degree chamfers")] = 0.0
    scatter_mm: Annotated[NotNegative, about("mm", "half-width of the sizes' rectangular scatter")] = 0.0
    flaws: Annotated[
        tuple[Flaws, ...], Field(max_length=8), about("", "list of tables; none: the bar never breaks")
    ] = ()

    @model_validator(mode="after")
    def _fits(self) -> BarCard:
        if (self.section == "rectangle") != (self.width_mm is not None):
            raise ValueError("width_mm belongs to a rectangle and only to a rectangle")
        if self.section == "tube" and not self.inner_diameter_mm < self.thickness_mm:
            raise ValueError("the bore of a tube is smaller than its diameter")
        if self.section == "tube" and any(flaws.where in ("volume", "edges") for flaws in self.flaws):
            raise ValueError("a tube takes flaws of its face or surface only")
        if self.section == "circle" and any(flaws.where == "edges" for flaws in self.flaws):
            raise ValueError("a rod has no edges to put flaws on")
        return self


class Contact(Card):
    """Between crosshead and bar."""

    fixture: Annotated[Name | None, about("", "fixture as fitted; left out: the frame card's first")] = None
    gap_mm: Annotated[
        Positive | None, about("mm", "from the start position to the bar; left out: the frame card's")
    ] = None
    toe_mm: Annotated[
        NotNegative, about("mm", "travel over which the stiffness grows from nothing to its full value")
    ] = 0.0
    friction: Annotated[
        float, Field(ge=0, le=1), about("", "coefficient of friction of rollers that do not roll")
    ] = 0.0
    load_offset_mm: Annotated[
        float, Field(ge=-50, le=50), about("mm", "load rollers off the middle, to the right")
    ] = 0.0


class Drive(Card):
    """The crosshead, its controller, and everything elastic but the bar."""

    stiffness_n_mm: Annotated[Positive, about("N/mm", "everything but the bar")] = 10_000.0
    acceleration_mm_s2: Annotated[
        Positive | None, about("mm/s^2", "of the drive's ramps; left out: speeds change at once")
    ] = None
    stop_latency_s: Annotated[NotNegative, about("s", "from the stop command to the begin of braking")] = 0.15
    start_latency_s: Annotated[NotNegative, about("s", "from a move command to the motion")] = 0.0
    speed_error_percent: Annotated[float, Field(gt=-100, le=1000), about("%", "error of every speed")] = 0.0
    end_up_mm: Annotated[float | None, about("mm", "upper end switch; left out: the card's travel")] = None
    end_down_mm: Annotated[float | None, about("mm", "lower end switch; left out: the card's travel")] = None
    hand_mm_min: Annotated[
        Positive, about("mm/min", "speed at which the crosshead is raised from the machine's own panel")
    ] = 60.0
    watchdog: Annotated[bool, about("", "the machine obeys the frame card's keep-alive")] = True


class Sensor(Card):
    """A sensor and its amplifier, in the unit of its channel."""

    time_constant_s: Annotated[NotNegative, about("s", "first-order lag")] = 0.0
    noise: Annotated[NotNegative, about("unit of the channel", "standard deviation of white noise")] = 0.0
    hum: Annotated[NotNegative, about("unit of the channel", "amplitude of the mains hum")] = 0.0
    hum_hz: Annotated[Positive, about("Hz", "frequency of the hum")] = 50.0
    drift_per_s: Annotated[float, about("unit of the channel per s", "drift from power-on")] = 0.0
    lsb: Annotated[NotNegative, about("unit of the channel", "step; 0: the channel's own count")] = 0.0


class ForceSensor(Sensor):
    """The load cell and its amplifier, in newton."""

    zero: Annotated[
        float | None, about("N", "reading without load; left out: the frame card's zero balance")
    ] = None


class OtherSensor(Sensor):
    """Any other sensor, in the unit of its channel."""

    zero: Annotated[
        float, about("unit of the channel", "added to the truth; the value of temperature and humidity")
    ] = 0.0


class AfterBreak(Card):
    """How the bar lets go."""

    kind: Annotated[Literal["sudden", "gradual"], about("", "sudden break or gradual failure")] = "sudden"
    ring_hz: Annotated[NotNegative, about("Hz", "free ringing of the load train; 0: none")] = 250.0
    ring_damping: Annotated[float, Field(gt=0, lt=1), about("", "damping ratio of the ringing")] = 0.03
    residual_percent: Annotated[Percent, about("%", "share of the break force that wedged halves carry")] = (
        0.0
    )
    residual_s: Annotated[NotNegative, about("s", "how long they carry it")] = 0.0
    fall_s: Annotated[Positive, about("s", "time constant of a gradual failure")] = 0.08
    softening_percent: Annotated[Percent, about("%", "slope lost at the highest load")] = 0.0
    softening_from_percent: Annotated[Percent, about("%", "load at which softening begins")] = 60.0


class Electronics(Card):
    """Between the converter and the cable."""

    clock_error_ppm: Annotated[
        float, Field(ge=-10_000, le=10_000), about("ppm", "error of the device's sample clock")
    ] = 0.0
    batch_s: Annotated[
        NotNegative, Field(le=1), about("s", "rows leave in batches, as behind an adapter's latency timer")
    ] = 0.0
    counter_start: Annotated[int, Field(ge=0, le=2**62), about("", "counter of the first sample")] = 0


class SimulatorCard(Card):
    """One virtual machine."""

    card: Annotated[Literal["simulator"], about("", "kind of this card")]
    name: Annotated[Name, about("", "name, for messages")]
    title: Annotated[str, Field(max_length=120), about("", "one line for people")] = ""
    seed: Annotated[int, Field(ge=0, le=2**63 - 1), about("", "seed of flaws, sizes and noise")] = 1
    bar: Annotated[BarCard, about("", "table: the bars")]
    contact: Annotated[Contact, about("", "table: between crosshead and bar")] = Contact()
    drive: Annotated[Drive, about("", "table: the crosshead")] = Drive()
    force: Annotated[ForceSensor, about("", "table: the load cell")] = ForceSensor()
    position: Annotated[OtherSensor, about("", "table: position of the crosshead")] = OtherSensor()
    deflection: Annotated[OtherSensor, about("", "table: sensor under the middle of the bar")] = OtherSensor()
    strain: Annotated[OtherSensor, about("", "table: gauge on the tensile face, in the middle")] = (
        OtherSensor()
    )
    temperature: Annotated[OtherSensor, about("", "table: temperature")] = OtherSensor(zero=23.0)
    humidity: Annotated[OtherSensor, about("", "table: relative humidity")] = OtherSensor(zero=45.0)
    after_break: Annotated[AfterBreak, about("", "table: how a bar lets go")] = AfterBreak()
    electronics: Annotated[Electronics, about("", "table: clock, counter, batches")] = Electronics()
    faults: Annotated[
        tuple[AnyFault, ...], Field(max_length=200), about("", "list of tables: what goes wrong, and when")
    ] = ()


def load_simulator(path: Path) -> SimulatorCard:
    """Read and check a simulator card; CardError with one line for every fault."""
    return simulator_from(read_tree(path), str(path))


def simulator_from(tree: Mapping[str, object], file: str = "card") -> SimulatorCard:
    """A card from a parsed tree."""
    tree = {key: _tuples(value) for key, value in tree.items()}
    found = [*_card_faults(tree), *_misfortune_faults(tree.get("faults", ()))]
    raise_faults(fault.line(file, tree) for fault in found)
    return SimulatorCard.model_validate(tree)


def _card_faults(tree: Mapping[str, object]) -> Iterator[Fault]:
    """Of all but the list of misfortunes, whose kinds the general words cannot tell apart."""
    misfortunes = tree.get("faults", ())
    checked = {
        **tree,
        "faults": () if isinstance(misfortunes, tuple) and len(misfortunes) <= 200 else misfortunes,
    }
    try:
        SimulatorCard.model_validate(checked)
    except ValidationError as error:
        yield from faults_of(error, SimulatorCard)


def _misfortune_faults(misfortunes: object) -> Iterator[Fault]:
    for number, tree in enumerate(misfortunes if isinstance(misfortunes, tuple) else ()):
        kind = tree.get("kind") if isinstance(tree, Mapping) else None
        if not isinstance(kind, str) or kind not in KINDS:
            yield Fault(
                ("faults", number, "kind"), "one of " + ", ".join(sorted(KINDS)), "choose one of these"
            )
            continue
        try:
            KINDS[kind].model_validate(tree)
        except ValidationError as error:
            yield from faults_of(error, KINDS[kind], ("faults", number))


def _tuples(value: object) -> object:
    """Lists as the tuples that strict models want."""
    if isinstance(value, Mapping):
        return {key: _tuples(item) for key, item in value.items()}
    return tuple(_tuples(item) for item in value) if isinstance(value, list | tuple) else value
