"""Cross rules of a frame card's links: binding, dialect tables, and whether the speed carries the rate."""

from __future__ import annotations

from collections.abc import Iterator

from daq.cards.derived import SILENCE_PERIODS, byte_bits, link_bytes_per_row, row_bits_per_s
from daq.cards.describe import Path
from daq.cards.faults import Fault
from daq.cards.frame import FrameCard, LinesDialect, Link, PacketsDialect

# A threshold below two periods would call every late row silence.
SILENCE_PERIODS_MIN = 2
USUAL_BAUDS = (
    9600,
    19_200,
    38_400,
    57_600,
    115_200,
    230_400,
    460_800,
    921_600,
    2_000_000,
    3_000_000,
    12_000_000,
)


def link_faults(number: int, link: Link) -> Iterator[Fault]:
    """Rules that look at one link alone."""
    at: Path = ("links", number)
    yield from _binding_faults(at, link)
    yield from _dialect_faults(at, link)
    yield from _wire_text_faults((*at, "start_command"), link.start_command)
    if link.silence_s is not None and link.silence_s * link.rate_hz < SILENCE_PERIODS_MIN:
        low_s = SILENCE_PERIODS_MIN / link.rate_hz
        allowed = f"at least {SILENCE_PERIODS_MIN} periods of {link.rate_hz:g} Hz = {low_s:g} s"
        do = f"raise it, or leave it out for the default of {SILENCE_PERIODS} periods, at least 0.05 s"
        yield Fault((*at, "silence_s"), allowed, do)


def _binding_faults(at: Path, link: Link) -> Iterator[Fault]:
    given = {key for key in ("port", "device_serial", "host", "tcp_port") if getattr(link, key) is not None}
    if link.kind == "serial":
        if len(given & {"port", "device_serial"}) != 1:
            both = given >= {"port", "device_serial"}
            allowed = "a serial link is bound by exactly one of port and device_serial"
            do = "remove port, device_serial is safer" if both else "add device_serial, or port"
            yield Fault((*at, "port"), allowed, do)
        foreign = given & {"host", "tcp_port"}
    else:
        for key in sorted({"host", "tcp_port"} - given):
            yield Fault((*at, key), "a TCP link needs host and tcp_port", "add this key")
        foreign = given & {"port", "device_serial"}
    for key in sorted(foreign):
        yield Fault((*at, key), f"not used by a link of kind '{link.kind}'", "remove it, or correct kind")


def _dialect_faults(at: Path, link: Link) -> Iterator[Fault]:
    tables = {"lines": link.lines, "packets": link.packets}
    if tables[link.dialect] is None:
        do = f"add the table [links.{link.dialect}]"
        yield Fault((*at, link.dialect), f"the table of dialect '{link.dialect}'", do)
    for other, table in tables.items():
        if other != link.dialect and table is not None:
            allowed = f"only the table of dialect '{link.dialect}'"
            yield Fault((*at, other), allowed, "remove this table, or correct dialect")
    if link.dialect == "lines" and link.lines is not None:
        yield from lines_faults((*at, "lines"), link.lines)
    if link.dialect == "packets" and link.packets is not None:
        yield from packets_faults((*at, "packets"), link.packets)


def lines_faults(at: Path, lines: LinesDialect) -> Iterator[Fault]:
    """Rules of a text dialect alone."""
    for key in ("separator", "line_end", "prefix", "label_separator"):
        yield from _wire_text_faults((*at, key), getattr(lines, key))
    if lines.decimal_comma and "," in (lines.separator + lines.label_separator):
        key = "separator" if "," in lines.separator else "label_separator"
        yield Fault(
            (*at, key), "no comma, because decimal_comma is true", "use the character the device sends"
        )
    if set(lines.separator) & set(lines.line_end):
        yield Fault((*at, "separator"), "no character of line_end", "correct one of the two")
    if lines.label_separator and lines.label_separator == lines.separator:
        yield Fault((*at, "label_separator"), "another text than separator", "correct one of the two")
    if any(char in lines.prefix for char in lines.line_end):
        yield Fault((*at, "prefix"), "no character of line_end", "correct one of the two")
    yield from _needs(at, lines, "counter_modulus", "counter_column")
    yield from _needs(at, lines, "time_column", "time_unit_s")
    yield from _needs(at, lines, "time_unit_s", "time_column")
    for key in ("counter_column", "time_column"):
        column = getattr(lines, key)
        if column is not None and lines.columns is not None and column > lines.columns:
            allowed = f"at most {lines.columns}, the columns of a row"
            yield Fault((*at, key), allowed, "correct one of the two")
    if lines.counter_column is not None and lines.counter_column == lines.time_column:
        yield Fault((*at, "time_column"), "another column than counter_column", "correct one of the two")


def packets_faults(at: Path, packets: PacketsDialect) -> Iterator[Fault]:
    """Rules of a packet dialect alone."""
    numbers = {field.name: field.number for field in packets.fields}
    if len(numbers) != len(packets.fields):
        yield Fault((*at, "fields"), "every field has its own name", "rename the fields that share a name")
    for key in ("counter_field", "time_field"):
        name = getattr(packets, key)
        if name is None:
            continue
        if name not in numbers:
            yield Fault((*at, key), "the name of one of the fields", _known(numbers))
        elif key == "counter_field" and not numbers[name].startswith("uint"):
            allowed = f"an unsigned integer field, because a counter wraps to 0 (this one is {numbers[name]})"
            yield Fault((*at, key), allowed, "correct the number of that field")
    if packets.counter_field is not None and packets.counter_field == packets.time_field:
        yield Fault((*at, "time_field"), "another field than counter_field", "correct one of the two")
    yield from _needs(at, packets, "time_field", "time_unit_s")
    yield from _needs(at, packets, "time_unit_s", "time_field")
    yield from _wire_text_faults((*at, "reply_line_end"), packets.reply_line_end)
    if packets.reply_sync is not None and _one_begins_the_other(packets.sync, packets.reply_sync):
        allowed = "bytes that do not begin like sync, nor sync like them"
        yield Fault((*at, "reply_sync"), allowed, "take the bytes the device really sends")


def _one_begins_the_other(sync: str, reply_sync: str) -> bool:
    shorter, longer = sorted((sync.lower(), reply_sync.lower()), key=len)
    return longer.startswith(shorter)


def _needs(at: Path, table: LinesDialect | PacketsDialect, key: str, other: str) -> Iterator[Fault]:
    if getattr(table, key) is not None and getattr(table, other) is None:
        yield Fault((*at, other), f"needed because {key} is given", "add this key")


def _wire_text_faults(at: Path, text: str) -> Iterator[Fault]:
    if not text.isascii():
        yield Fault(at, "plain ASCII text", "write the bytes that the device sends")


def _known(names: object) -> str:
    shown = ", ".join(str(name) for name in names) if isinstance(names, dict) else ""
    return f"choose one of {shown}" if shown else "add it"


def speed_faults(frame: FrameCard) -> Iterator[Fault]:
    """A serial speed that cannot carry the declared rate, with the arithmetic; a row that is too long."""
    for number, link in enumerate(frame.links):
        row_bytes = link_bytes_per_row(link, frame)
        if link.lines is not None and row_bytes > link.lines.line_bytes_max:
            allowed = f"at least {row_bytes} bytes, the longest row of this link"
            yield Fault(("links", number, "lines", "line_bytes_max"), allowed, "raise it")
        needed = row_bits_per_s(link, frame)
        if link.kind == "serial" and needed > link.speed_baud:
            yield Fault(
                ("links", number, "speed_baud"), _arithmetic(link, row_bytes, needed), _faster(needed, link)
            )


def _arithmetic(link: Link, row_bytes: int, needed: float) -> str:
    return (
        f"at least {needed:.0f} baud, because {row_bytes} bytes x {byte_bits(link)} bits x "
        f"{link.rate_hz:g} rows/s = {needed:.0f} bit/s"
    )


def _faster(needed: float, link: Link) -> str:
    for baud in USUAL_BAUDS:
        if baud >= needed:
            return f"set {baud} baud here and on the device, or lower rate_hz"
    return f"lower rate_hz below {link.rate_hz * link.speed_baud / needed:.0f} rows/s"
