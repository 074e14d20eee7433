"""The frame card: everything that is true of one test machine, its wiring and its fixtures."""

from __future__ import annotations

import datetime as dt
from typing import Annotated, Literal

from pydantic import Field

from daq.cards.base import Card

Positive = Annotated[float, Field(gt=0)]
NotNegative = Annotated[float, Field(ge=0)]
Name = Annotated[str, Field(pattern=r"^[a-z][a-z0-9-]{0,31}$")]

Role = Literal["force", "position", "deflection", "strain", "temperature", "humidity", "other"]
Number = Literal["int8", "uint8", "int16", "uint16", "int24", "uint24", "int32", "uint32", "float32", "float64"]
Check = Literal["none", "sum8", "xor8", "crc8", "crc16", "crc32"]
InputName = Literal["shield_open", "emergency_stop", "drive_fault", "end_up", "end_down", "moving"]


class Cell(Card):
    """Load cell and its amplifier."""

    serial: str
    capacity_n: Positive
    safe_overload_percent: Annotated[float, Field(ge=100, le=1000)] = 150.0
    verified_min_n: NotNegative
    verified_max_n: Positive
    verified_on: dt.date | None = None
    verified_due: dt.date | None = None
    position: Literal["crosshead", "supports"]
    time_constant_s: NotNegative | None = None      # None: lag not known
    bandwidth_hz: Positive | None = None
    noise_quiet_n: NotNegative | None = None        # sigma of the quiet record
    moving_mass_kg: Positive | None = None          # above the cell
    zero_balance_n: float = 0.0                      # gross reading of the clean, unloaded fixture
    uncertainty_percent: Positive = 0.5             # expanded (k = 2), of the force reading


class LinesDialect(Card):
    """Delimited text, one row a line. A field is found by `column` (1-based) or by `label` in the channel."""

    separator: Annotated[str, Field(min_length=1, max_length=4)] = ","       # " " = any run of blanks
    line_end: Annotated[str, Field(min_length=1, max_length=2)] = "\r\n"
    prefix: str = ""                                 # a row starts with this; other lines are replies
    decimal_comma: bool = False
    label_separator: Annotated[str, Field(max_length=2)] = ""   # "F=12.3" -> "="
    counter_column: Annotated[int, Field(ge=1, le=64)] | None = None
    counter_modulus: Annotated[int, Field(ge=2)] | None = None
    time_column: Annotated[int, Field(ge=1, le=64)] | None = None
    time_unit_s: Positive | None = None              # seconds per device time unit
    checksum: Check = "none"                         # last field, hexadecimal, over all before its separator
    line_bytes_max: Annotated[int, Field(ge=8, le=4096)] = 256


class PacketField(Card):
    """One field of a binary packet, in order. `channel` names a channel; counter/time/status/skip are special."""

    name: Annotated[str, Field(min_length=1, max_length=32)]
    number: Number


class PacketsDialect(Card):
    """Fixed binary packets. Replies of the machine are text lines between packets when `reply_sync` is set."""

    sync: Annotated[str, Field(pattern=r"^([0-9a-fA-F]{2}){1,8}$")]
    endian: Literal["little", "big"] = "little"
    fields: Annotated[tuple[PacketField, ...], Field(min_length=1, max_length=64)]
    counter_field: str | None = None
    time_field: str | None = None
    time_unit_s: Positive | None = None
    checksum: Check = "none"
    reply_sync: Annotated[str, Field(pattern=r"^([0-9a-fA-F]{2}){1,8}$")] | None = None
    reply_line_end: str = "\r\n"


class Link(Card):
    """One port. Bound by the device's serial number where there is one."""

    name: Name
    kind: Literal["serial", "tcp"]
    port: str | None = None                          # device path of a serial port
    device_serial: str | None = None                 # USB serial number; wins over port
    speed_baud: Annotated[int, Field(ge=300, le=12_000_000)] = 115_200
    data_bits: Literal[7, 8] = 8
    parity: Literal["none", "even", "odd"] = "none"
    stop_bits: Literal[1, 2] = 1
    dtr_at_open: bool = False
    rts_at_open: bool = False
    host: str | None = None
    tcp_port: Annotated[int, Field(ge=1, le=65535)] | None = None
    rate_hz: Positive                                # declared rows per second
    silence_s: Annotated[float, Field(gt=0, le=10)] | None = None   # default max(3 periods, 50 ms)
    start_command: str = ""                          # sent after opening so that data flow; must not move the frame
    dialect: Literal["lines", "packets"]
    lines: LinesDialect | None = None
    packets: PacketsDialect | None = None


class Channel(Card):
    """One column of one link with its linear calibration: value = sign * (counts * scale + offset)."""

    name: Name
    link: Name
    role: Role
    unit: Literal["N", "mm", "1", "degC", "percent", "V", ""]
    column: Annotated[int, Field(ge=1, le=64)] | None = None      # lines
    label: str | None = None                                      # lines with labels
    field: str | None = None                                      # packets
    scale: float = 1.0                                            # unit per count
    offset: float = 0.0
    sign: Literal[-1, 1] = 1
    counts_min: float | None = None                               # rails of the converter
    counts_max: float | None = None
    calibrated_on: dt.date | None = None


class Command(Card):
    """A motion command template and what the machine answers. {speed_mm_min} {distance_mm} {rate_n_s} allowed."""

    send: Annotated[str, Field(min_length=1, max_length=128)]
    reply: str = ""                                  # expected reply prefix; empty: the machine does not answer
    timeout_s: Annotated[float, Field(gt=0, le=5)] = 0.3


class KeepAlive(Card):
    """The machine's own watchdog: it stops when this is not sent for lapse_s."""

    send: Annotated[str, Field(min_length=1, max_length=64)]
    reply: str = ""
    every_s: Annotated[float, Field(gt=0, le=1)] = 0.1
    lapse_s: Annotated[float, Field(gt=0, le=5)] = 0.5


class StatusInput(Card):
    """One status input: from a channel's column, from a reply to `query`, or from a modem line."""

    name: InputName
    source: Literal["column", "reply", "modem"]
    column: Annotated[int, Field(ge=1, le=64)] | None = None      # lines
    field: str | None = None                                      # packets
    bit: Annotated[int, Field(ge=0, le=31)] | None = None         # bit of an integer column; None = whole value != 0
    letter: Annotated[str, Field(max_length=1)] = ""              # reply: present in the status word = active
    line: Literal["cts", "dsr", "dcd", "ri"] | None = None
    active_when: bool = True                                      # False: active when the bit/letter/line is absent


class StatusQuery(Card):
    """How the machine is asked for its status word: reply = prefix + letters, each of which must be known."""

    send: Annotated[str, Field(min_length=1, max_length=64)]
    reply: Annotated[str, Field(min_length=1, max_length=32)]
    every_s: Annotated[float, Field(gt=0, le=5)] = 0.1
    timeout_s: Annotated[float, Field(gt=0, le=5)] = 0.3
    letters_ignored: str = ""                                     # known, without meaning for midspan


class Motion(Card):
    """What midspan may ask the crosshead to do. Positive speed = towards the specimen (loading)."""

    link: Name
    line_end: str = "\r\n"
    speed_mm_min_min: Positive
    speed_mm_min_max: Positive
    approach_mm_min: Positive = 5.0
    return_mm_min: Positive = 20.0
    position_sign: Literal[-1, 1] = 1                # of the position channel when moving towards the specimen
    travel_mm_min: float = -50.0
    travel_mm_max: float = 50.0
    gap_mm: NotNegative = 2.0                        # from the start position to the specimen
    anvil_gap_mm: NotNegative = 10.0                 # from contact to the lower anvil
    stop_latency_s: Annotated[float, Field(gt=0, le=5)] = 0.15     # measured p95 of the stop drill
    blocked_stiffness_n_mm: Positive = 20_000.0
    backoff_mm: NotNegative = 2.0
    backoff_auto: bool = False
    start: Command
    stop: Command
    jog: Command | None = None
    retreat: Command | None = None                   # move away from the specimen at a speed
    force_rate: Command | None = None                # the machine's own force loop
    keep_alive: KeepAlive | None = None
    status: StatusQuery | None = None


class CompliancePoint(Card):
    force_n: NotNegative
    deflection_um: float


class Compliance(Card):
    """Force against deflection of everything but the specimen; monotone."""

    fixture: str
    cell_serial: str
    measured_on: dt.date | None = None
    points: Annotated[tuple[CompliancePoint, ...], Field(min_length=2, max_length=200)]


class Fixture(Card):
    """A fixture as measured; spans come from here, never typed elsewhere."""

    name: Name
    geometry: Literal["3-point", "4-point"]
    support_span_mm: Positive
    load_span_mm: NotNegative = 0.0                  # 0 for 3-point
    support_span_u_mm: NotNegative = 0.1             # half-width, rectangular
    load_span_u_mm: NotNegative = 0.1
    roller_diameter_mm: Positive = 4.5
    rollers: Literal["free", "fixed"] = "free"
    rating_n: Positive
    mass_on_cell_kg: NotNegative = 0.0


class FrameCard(Card):
    """One test machine."""

    card: Literal["frame"]
    name: Name
    title: str = ""
    simulated: bool
    cell: Cell
    links: Annotated[tuple[Link, ...], Field(min_length=1, max_length=8)]
    channels: Annotated[tuple[Channel, ...], Field(min_length=1, max_length=64)]
    inputs: tuple[StatusInput, ...] = ()
    motion: Motion | None = None                     # None: monitor only
    fixtures: Annotated[tuple[Fixture, ...], Field(min_length=1)]
    compliance: Compliance | None = None
