"""What follows from a card: column order, silence, row sizes, fixtures, spans, sections, expectations.

Free functions on valid cards; nothing here is stored, and nothing here judges a card (rules_*.py do).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from daq.cards.frame import Channel, Compliance, Fixture, FrameCard, LinesDialect, Link, Role, StatusInput
from daq.cards.method import MethodCard, Section
from daq.cards.series import Specimen

SILENCE_PERIODS = 3
SILENCE_S_MIN = 0.05
NUMBER_BYTES = {
    "int8": 1, "uint8": 1, "int16": 2, "uint16": 2, "int24": 3, "uint24": 3,
    "int32": 4, "uint32": 4, "float32": 4, "float64": 8,
}  # fmt: skip
CHECK_BYTES = {"none": 0, "sum8": 1, "xor8": 1, "crc8": 1, "crc16": 2, "crc32": 4}
# A field whose rails are not stated: sign, five digits, point, one decimal. A guess, and said to be one.
FIELD_CHARACTERS_GUESS = 8
# Limits that always apply: stop at 90 % of the cell's capacity and of the fixture's rating.
WORKING_SHARE = 0.9
# A fixture within 1 % of the method's span fits; results use the measured span (common practice, no source).
SPAN_TOLERANCE = 0.01


# --- links and channels ---


def link_number(frame: FrameCard, name: str) -> int:
    """Place of a link in the card, 0-based: the `source` of its blocks. KeyError for an unknown name."""
    for number, link in enumerate(frame.links):
        if link.name == name:
            return number
    raise KeyError(name)


def channels_of(frame: FrameCard, link: int) -> tuple[Channel, ...]:
    """The channels of one link in the column order of its blocks: the order in which the card lists them."""
    name = frame.links[link].name
    return tuple(channel for channel in frame.channels if channel.link == name)


def channels_with(frame: FrameCard, role: Role) -> tuple[Channel, ...]:
    """All channels of one role, in the card's order."""
    return tuple(channel for channel in frame.channels if channel.role == role)


def force_channel(frame: FrameCard) -> Channel:
    """The one force channel; a card that was loaded has exactly one."""
    (channel,) = channels_with(frame, "force")
    return channel


def position_channel(frame: FrameCard) -> Channel | None:
    """The crosshead position; None: a stop cannot be verified on this frame."""
    return next(iter(channels_with(frame, "position")), None)


def block_column(frame: FrameCard, channel: Channel) -> tuple[int, int]:
    """(source, column) of a channel in the blocks."""
    source = link_number(frame, channel.link)
    return source, channels_of(frame, source).index(channel)


def input_link(frame: FrameCard, status: StatusInput) -> int:
    """Link that carries a status input: its own, else the motion link, else the first."""
    if status.link is not None:
        return link_number(frame, status.link)
    return motion_link(frame) or 0


def motion_link(frame: FrameCard) -> int | None:
    """Link that carries the motion commands; None: monitor only."""
    return None if frame.motion is None else link_number(frame, frame.motion.link)


def silence_s(link: Link) -> float:
    """No data for this long stops the machine."""
    if link.silence_s is not None:
        return link.silence_s
    return max(SILENCE_PERIODS / link.rate_hz, SILENCE_S_MIN)


def value_of(channel: Channel, counts: float) -> float:
    """Calibrated value of a count, in the channel's unit."""
    return channel.sign * (counts * channel.scale + channel.offset)


def counts_of(channel: Channel, value: float) -> float:
    """Inverse of value_of, not rounded."""
    return (value / channel.sign - channel.offset) / channel.scale


# --- rows on the wire ---


def byte_bits(link: Link) -> int:
    """Bits on a serial line for one byte: start, data, parity, stop."""
    return 1 + link.data_bits + (0 if link.parity == "none" else 1) + link.stop_bits


def link_bytes_per_row(link: Link, frame: FrameCard) -> int:
    """Longest row of this link in bytes; without rails a text field is taken as FIELD_CHARACTERS_GUESS."""
    if link.packets is not None:
        packets = link.packets
        body = sum(NUMBER_BYTES[field.number] for field in packets.fields)
        return len(packets.sync) // 2 + body + CHECK_BYTES[packets.checksum]
    lines = link.lines or LinesDialect()
    channels = channels_of(frame, link_number(frame, link.name))
    fields = [channel_characters(channel, lines) for channel in channels]
    if lines.counter_column is not None:
        fields.append(
            len(str(lines.counter_modulus - 1)) if lines.counter_modulus else FIELD_CHARACTERS_GUESS
        )
    if lines.time_column is not None:
        fields.append(FIELD_CHARACTERS_GUESS)
    fields.extend(1 for status in column_inputs(frame, link))
    fields.extend(FIELD_CHARACTERS_GUESS for unused in range((lines.columns or 0) - len(fields)))
    if lines.checksum != "none":
        fields.append(2 * CHECK_BYTES[lines.checksum])
    between = len(lines.separator) * max(0, len(fields) - 1)
    return len(lines.prefix) + sum(fields) + between + len(lines.line_end)


def channel_characters(channel: Channel, lines: LinesDialect) -> int:
    """Longest text of one channel's field, label and its separator included."""
    label = 0 if channel.label is None else len(channel.label) + len(lines.label_separator)
    if channel.counts_min is None or channel.counts_max is None:
        return label + FIELD_CHARACTERS_GUESS
    return label + max(len(f"{channel.counts_min:.0f}"), len(f"{channel.counts_max:.0f}"))


def column_inputs(frame: FrameCard, link: Link) -> tuple[StatusInput, ...]:
    """Status inputs with a text column of their own on this link (several bits of one column count once)."""
    number = link_number(frame, link.name)
    taken = {channel.column for channel in channels_of(frame, number)}
    first: dict[int, StatusInput] = {}
    for status in frame.inputs:
        if status.column is not None and status.column not in taken and input_link(frame, status) == number:
            first.setdefault(status.column, status)
    return tuple(first.values())


def row_bits_per_s(link: Link, frame: FrameCard) -> float:
    """Bits per second that the declared rate needs on a serial line."""
    return link_bytes_per_row(link, frame) * byte_bits(link) * link.rate_hz


def row_duration_s(link: Link, frame: FrameCard) -> float:
    """Time one row spends on a serial line; 0 for TCP."""
    if link.kind == "tcp":
        return 0.0
    return link_bytes_per_row(link, frame) * byte_bits(link) / link.speed_baud


# --- fixtures, spans, sections ---


@dataclass(frozen=True, slots=True)
class Spans:
    """Support and load span; load_mm is 0 for 3-point."""

    support_mm: float
    load_mm: float

    @property
    def arm_mm(self) -> float:
        """Distance from a support to the nearest loading roller."""
        return (self.support_mm - self.load_mm) / 2.0


@dataclass(frozen=True, slots=True)
class SectionSize:
    """Cross-section of one bar, means of its readings. Circle, tube: width_mm = thickness_mm = diameter."""

    section: Section
    width_mm: float
    thickness_mm: float
    inner_diameter_mm: float = 0.0
    chamfer_mm: float = 0.0

    @property
    def modulus_mm3(self) -> float:
        """Section modulus W, chamfer not regarded (elementary: bh^2/6; pi (D^4 - d^4) / 32 D)."""
        if self.section == "rectangle":
            return self.width_mm * self.thickness_mm**2 / 6.0
        outer = self.thickness_mm
        return math.pi * (outer**4 - self.inner_diameter_mm**4) / (32.0 * outer)

    @property
    def inertia_mm4(self) -> float:
        """Second moment of area, chamfer not regarded: W times half the thickness."""
        return self.modulus_mm3 * self.thickness_mm / 2.0


def fixture_by_name(frame: FrameCard, name: str) -> Fixture:
    """The fixture of that name. KeyError for a name that is not there."""
    for fixture in frame.fixtures:
        if fixture.name == name:
            return fixture
    raise KeyError(name)


def spans_of(fixture: Fixture) -> Spans:
    """The spans to compute with: those measured on the fixture."""
    return Spans(fixture.support_span_mm, 0.0 if fixture.geometry == "3-point" else fixture.load_span_mm)


def geometry_of(method: MethodCard) -> Spans:
    """The spans the method asks for, exact for quarter and third point."""
    share = {"3-point": 0.0, "4-point-quarter": 0.5, "4-point-third": 1.0 / 3.0}
    if method.geometry in share:
        return Spans(method.support_span_mm, method.support_span_mm * share[method.geometry])
    return Spans(method.support_span_mm, method.load_span_mm)


def spans_apart(method: MethodCard, fixture: Fixture) -> dict[str, tuple[float, float]]:
    """Spans that do not agree: key -> (what the method asks for, what was measured on the fixture), mm."""
    wanted, measured = geometry_of(method), spans_of(fixture)
    pairs = {
        "support_span_mm": (wanted.support_mm, measured.support_mm),
        "load_span_mm": (wanted.load_mm, measured.load_mm),
    }
    return {
        key: (want, have)
        for key, (want, have) in pairs.items()
        if not abs(want - have) <= SPAN_TOLERANCE * have
    }


def compliance_for(frame: FrameCard, fixture_name: str) -> Compliance | None:
    """The compliance table, when it was measured with this fixture and this cell."""
    table = frame.compliance
    if table is None or table.fixture != fixture_name or table.cell_serial != frame.cell.serial:
        return None
    return table


def mean_mm(readings: tuple[float, ...]) -> float:
    """Mean of the readings of one dimension."""
    return math.fsum(readings) / len(readings)


def section_of(specimen: Specimen, method: MethodCard) -> SectionSize:
    """The measured cross-section of a bar."""
    thickness_mm = mean_mm(specimen.thickness_mm)
    width_mm = mean_mm(specimen.width_mm) if method.section == "rectangle" else thickness_mm
    chamfer_mm = method.chamfer_mm if specimen.chamfer_mm is None else specimen.chamfer_mm
    inner_mm = specimen.inner_diameter_mm if method.section == "tube" else 0.0
    return SectionSize(method.section, width_mm, thickness_mm, inner_mm, chamfer_mm)


def nominal_section(method: MethodCard) -> SectionSize:
    """The cross-section the method expects; a method that was loaded has all its dimensions."""
    if method.section == "rectangle":
        assert method.width_mm is not None and method.thickness_mm is not None
        return SectionSize("rectangle", method.width_mm, method.thickness_mm, 0.0, method.chamfer_mm)
    assert method.diameter_mm is not None
    inner_mm = method.inner_diameter_mm if method.section == "tube" else 0.0
    return SectionSize(method.section, method.diameter_mm, method.diameter_mm, inner_mm)


# --- what to expect ---


def load_for_stress_n(stress_mpa: float, size: SectionSize, spans: Spans) -> float:
    """Force at a stress: sigma = M / W with M = F (L - Li) / 4 (elementary beam theory)."""
    return 4.0 * stress_mpa * size.modulus_mm3 / (spans.support_mm - spans.load_mm)


def bar_stiffness_n_mm(modulus_gpa: float, size: SectionSize, spans: Spans) -> float:
    """Force over deflection at the loading rollers: 12 E I / (a^2 (3 L - 4 a)) (elementary beam theory)."""
    arm_mm = spans.arm_mm
    return 12e3 * modulus_gpa * size.inertia_mm4 / (arm_mm**2 * (3.0 * spans.support_mm - 4.0 * arm_mm))


def median_strength_mpa(method: MethodCard) -> float:
    """Median of the expected two-parameter Weibull distribution, from its mean and modulus."""
    modulus = method.expected.weibull_modulus
    scale_mpa = method.expected.strength_mpa / math.gamma(1.0 + 1.0 / modulus)
    return float(scale_mpa * math.log(2.0) ** (1.0 / modulus))


def median_load_n(method: MethodCard, spans: Spans) -> float:
    """P50 of the expected break load of a nominal bar."""
    return load_for_stress_n(median_strength_mpa(method), nominal_section(method), spans)


@dataclass(frozen=True, slots=True)
class PlannedSpeed:
    """Crosshead speed that a force or stress rate needs, and what it follows from: rate over stiffness."""

    rate_n_s: float
    stiffness_n_mm: float

    @property
    def mm_min(self) -> float:
        return 60.0 * self.rate_n_s / self.stiffness_n_mm


def planned_speed(frame: FrameCard, method: MethodCard, fixture: Fixture) -> PlannedSpeed | None:
    """For a nominal bar in series with the frame; None where the method sets the speed itself."""
    spans, size = spans_of(fixture), nominal_section(method)
    rate_n_s = method.rate.rate_n_s if method.rate.mode == "force" else None
    if method.rate.mode == "stress" and method.rate.rate_mpa_s is not None:
        rate_n_s = load_for_stress_n(method.rate.rate_mpa_s, size, spans)
    if rate_n_s is None:
        return None
    bar = bar_stiffness_n_mm(method.expected.modulus_gpa, size, spans)
    return PlannedSpeed(rate_n_s, 1.0 / (1.0 / bar + 1.0 / frame_stiffness_n_mm(frame, fixture.name)))


def working_limit_n(frame: FrameCard, fixture: Fixture) -> float:
    """The gross force at which midspan stops, whatever the method says."""
    return WORKING_SHARE * min(frame.cell.capacity_n, fixture.rating_n)


def frame_stiffness_n_mm(frame: FrameCard, fixture_name: str) -> float:
    """Mean stiffness of everything but the bar: compliance table, else blocked stiffness, else rigid."""
    table = compliance_for(frame, fixture_name)
    if table is not None:
        first, last = table.points[0], table.points[-1]
        rise_um = last.deflection_um - first.deflection_um
        if rise_um > 0:
            return 1e3 * (last.force_n - first.force_n) / rise_um
    return math.inf if frame.motion is None else frame.motion.blocked_stiffness_n_mm
