"""The wiring part of a frame card: ports, dialects, channels, status inputs. Describes; opens nothing."""

from __future__ import annotations

import datetime as dt
from typing import Annotated, Literal

from pydantic import Field

from daq.cards.base import Card, Name, Positive, about

Role = Literal["force", "position", "deflection", "strain", "temperature", "humidity", "other"]
Number = Literal[
    "int8", "uint8", "int16", "uint16", "int24", "uint24", "int32", "uint32", "float32", "float64"
]
Check = Literal["none", "sum8", "xor8", "crc8", "crc16", "crc32"]
InputName = Literal["shield_open", "emergency_stop", "drive_fault", "end_up", "end_down", "moving"]
Column = Annotated[int, Field(ge=1, le=64)]
Sync = Annotated[str, Field(pattern=r"^([0-9a-fA-F]{2}){1,8}$")]
Text16 = Annotated[str, Field(min_length=1, max_length=16)]
Text32 = Annotated[str, Field(min_length=1, max_length=32)]
Place = Annotated[str, Field(min_length=1, max_length=255)]


class LinesDialect(Card):
    """Delimited text, one row a line. A field is found by `column` (1-based) or by `label` in the channel."""

    separator: Annotated[
        str,
        Field(min_length=1, max_length=4),
        about("", "text between two fields; one blank = any run of blanks"),
    ] = ","
    line_end: Annotated[str, Field(min_length=1, max_length=2), about("", "end of a row")] = "\r\n"
    prefix: Annotated[
        str,
        Field(max_length=16),
        about("", "a row starts with this; every other line is a reply of the machine"),
    ] = ""
    decimal_comma: Annotated[bool, about("", "numbers are written with a decimal comma")] = False
    label_separator: Annotated[
        str, Field(max_length=2), about("", "text between label and number: '=' for F=12.3; empty: no labels")
    ] = ""
    counter_column: Annotated[Column | None, about("", "column of the device's sample counter")] = None
    counter_modulus: Annotated[
        Annotated[int, Field(ge=2)] | None, about("", "the counter restarts at 0 after this many samples")
    ] = None
    time_column: Annotated[Column | None, about("", "column of the device's own time")] = None
    time_unit_s: Annotated[Positive | None, about("s", "length of one unit of the device's time")] = None
    columns: Annotated[
        Column | None,
        about("", "fields of a full row, the check not counted; left out: at least the highest column used"),
    ] = None
    checksum: Annotated[Check, about("", "last field, hexadecimal, over everything before its separator")] = (
        "none"
    )
    line_bytes_max: Annotated[
        int, Field(ge=8, le=4096), about("bytes", "a longer line is discarded and counted")
    ] = 256


class PacketField(Card):
    """One field of a binary packet, in order."""

    name: Annotated[Text32, about("", "name of the field; channels, counter, time and inputs refer to it")]
    number: Annotated[Number, about("", "how the number is stored")]


class PacketsDialect(Card):
    """Fixed binary packets. With `reply_sync`, replies of the machine are text lines between packets."""

    sync: Annotated[Sync, about("", "first bytes of every packet, hexadecimal, 1 to 8 bytes")]
    endian: Annotated[Literal["little", "big"], about("", "byte order of all fields and of the checksum")] = (
        "little"
    )
    fields: Annotated[
        tuple[PacketField, ...],
        Field(min_length=1, max_length=64),
        about("", "the fields after sync, in order"),
    ]
    counter_field: Annotated[str | None, about("", "field with the device's sample counter")] = None
    time_field: Annotated[str | None, about("", "field with the device's own time")] = None
    time_unit_s: Annotated[Positive | None, about("s", "length of one unit of the device's time")] = None
    checksum: Annotated[Check, about("", "last bytes of the packet, over everything before them")] = "none"
    reply_sync: Annotated[
        Sync | None,
        about("", "bytes that start a reply line between packets, hexadecimal; left out: no replies"),
    ] = None
    reply_line_end: Annotated[str, Field(min_length=1, max_length=2), about("", "end of a reply line")] = (
        "\r\n"
    )


class Link(Card):
    """One port. Bound by the device's serial number where there is one."""

    name: Annotated[Name, about("", "name of the link, used by channels, inputs and motion")]
    kind: Annotated[
        Literal["serial", "tcp"], about("", "serial port (or pseudo-terminal), or TCP connection")
    ]
    port: Annotated[Place | None, about("", "device path of a serial port")] = None
    device_serial: Annotated[
        Place | None,
        about("", "serial number of the USB adapter; safer than port, which may change after a reboot"),
    ] = None
    speed_baud: Annotated[int, Field(ge=300, le=12_000_000), about("baud", "speed of a serial port")] = (
        115_200
    )
    data_bits: Annotated[Literal[7, 8], about("bit", "data bits of a serial port")] = 8
    parity: Annotated[Literal["none", "even", "odd"], about("", "parity of a serial port")] = "none"
    stop_bits: Annotated[Literal[1, 2], about("bit", "stop bits of a serial port")] = 1
    dtr_at_open: Annotated[bool, about("", "level of the DTR line, set before the port opens")] = False
    rts_at_open: Annotated[bool, about("", "level of the RTS line, set before the port opens")] = False
    host: Annotated[Place | None, about("", "address of a TCP device")] = None
    tcp_port: Annotated[
        Annotated[int, Field(ge=1, le=65535)] | None, about("", "port number of a TCP device")
    ] = None
    rate_hz: Annotated[Positive, Field(le=200_000), about("Hz", "declared rows per second")]
    silence_s: Annotated[
        Annotated[float, Field(gt=0, le=10)] | None,
        about("s", "no data for this long stops the machine; left out: the longer of 3 periods and 0.05 s"),
    ] = None
    start_command: Annotated[
        str,
        Field(max_length=128),
        about("", "sent after opening so that data flow; may never move the frame"),
    ] = ""
    dialect: Annotated[
        Literal["lines", "packets"], about("", "text lines or binary packets; needs its own table")
    ]
    lines: Annotated[LinesDialect | None, about("", "table of the dialect 'lines'")] = None
    packets: Annotated[PacketsDialect | None, about("", "table of the dialect 'packets'")] = None


class Channel(Card):
    """One column of one link with its linear calibration: value = sign * (counts * scale + offset)."""

    name: Annotated[Name, about("", "name of the channel in files and on screens")]
    link: Annotated[Name, about("", "link that carries it")]
    role: Annotated[
        Role, about("", "what it measures; exactly one channel is 'force', at most one 'position'")
    ]
    unit: Annotated[
        Literal["N", "mm", "1", "degC", "percent", "V", ""], about("", "unit of the value after calibration")
    ]
    column: Annotated[Column | None, about("", "column of a text row, the first is 1")] = None
    label: Annotated[Text16 | None, about("", "label of the field in a text row with labels")] = None
    field: Annotated[Text32 | None, about("", "field of a binary packet")] = None
    scale: Annotated[float, about("unit per count", "value of one count, not 0")] = 1.0
    offset: Annotated[float, about("unit of the channel", "added after the scale")] = 0.0
    sign: Annotated[
        Literal[-1, 1], about("", "-1 turns the channel round; compression of the bar is positive")
    ] = 1
    counts_min: Annotated[float | None, about("counts", "lower rail of the converter")] = None
    counts_max: Annotated[float | None, about("counts", "upper rail of the converter")] = None
    calibrated_on: Annotated[dt.date | None, about("date", "day of the calibration")] = None


class StatusInput(Card):
    """One status input: from a column of the data, the reply to the status query, or a modem line."""

    name: Annotated[InputName, about("", "which input it is")]
    source: Annotated[Literal["column", "reply", "modem"], about("", "where it is read")]
    link: Annotated[
        Name | None,
        about("", "link that carries it; left out: the motion link, or the first link without motion"),
    ] = None
    column: Annotated[Column | None, about("", "source column, text rows: the column")] = None
    field: Annotated[Text32 | None, about("", "source column, binary packets: the field")] = None
    bit: Annotated[
        Annotated[int, Field(ge=0, le=31)] | None,
        about(
            "", "source column: bit of the integer, 0 is the lowest; left out: active when the value is not 0"
        ),
    ] = None
    letter: Annotated[
        str, Field(max_length=1), about("", "source reply: this letter stands in the status word when active")
    ] = ""
    line: Annotated[Literal["cts", "dsr", "dcd", "ri"] | None, about("", "source modem: the line")] = None
    active_when: Annotated[
        bool,
        about("", "false: active when the bit, letter or line is absent (a wire that breaks is then seen)"),
    ] = True
