"""Cross rules of a frame card's channels and status inputs: where each is found, and what it may be."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Mapping

from daq.cards.derived import NUMBER_BYTES
from daq.cards.describe import Path
from daq.cards.faults import Fault
from daq.cards.frame import Cell, Channel, Link, Motion, StatusInput

UNIT_OF_ROLE = {
    "force": "N", "position": "mm", "deflection": "mm", "strain": "1",
    "temperature": "degC", "humidity": "percent",
}  # fmt: skip
Links = Mapping[str, Link]


def channel_faults(number: int, channel: Channel, links: Links | None) -> Iterator[Fault]:
    """Rules of one channel; links is None when the card's links could not be read."""
    at: Path = ("channels", number)
    unit = UNIT_OF_ROLE.get(channel.role, channel.unit)
    if channel.unit != unit:
        do = "scale the channel to this unit, or correct its role"
        yield Fault((*at, "unit"), f"'{unit}' for a channel of role '{channel.role}'", do)
    if channel.scale == 0.0:
        yield Fault((*at, "scale"), "any number but 0", "take the value of one count from the calibration")
    low, high = channel.counts_min, channel.counts_max
    if low is not None and high is not None and low >= high:
        yield Fault((*at, "counts_max"), f"a number above counts_min = {low:g} counts", "correct the rails")
    if links is None:
        return
    link = links.get(channel.link)
    if link is None:
        yield Fault((*at, "link"), "the name of one of the links", _choose(links))
    else:
        yield from _place_faults(at, channel, link)


def _place_faults(at: Path, item: Channel | StatusInput, link: Link) -> Iterator[Fault]:
    label = item.label if isinstance(item, Channel) else None
    if link.packets is not None and link.dialect == "packets":
        yield from _foreign(at, {"column": item.column, "label": label}, "packets")
        fields = {field.name: field.number for field in link.packets.fields}
        special = {link.packets.counter_field, link.packets.time_field}
        names = [name for name in fields if name not in special]
        if item.field not in names:
            yield Fault((*at, "field"), f"one of the data fields of link '{link.name}'", _choose(names))
    if link.lines is not None and link.dialect == "lines":
        yield from _foreign(at, {"field": item.field}, "lines")
        yield from _lines_place_faults(at, item.column, label, link)


def _lines_place_faults(at: Path, column: int | None, label: str | None, link: Link) -> Iterator[Fault]:
    assert link.lines is not None
    if (column is None) == (label is None):
        do = "add column, counted from 1, or label" if column is None else "remove one of the two"
        yield Fault((*at, "column"), "exactly one of column and label in a text row", do)
    if label is not None and not link.lines.label_separator:
        do = "add label_separator to [links.lines], or use column"
        yield Fault((*at, "label"), f"no label, because link '{link.name}' has no label_separator", do)
    if column is not None and link.lines.columns is not None and column > link.lines.columns:
        allowed = f"at most {link.lines.columns}, the columns of a row of link '{link.name}'"
        yield Fault((*at, "column"), allowed, "correct the column, or columns in [links.lines]")
    for key in ("counter_column", "time_column"):
        if column is not None and column == getattr(link.lines, key):
            yield Fault(
                (*at, "column"), f"another column than {key} of link '{link.name}'", "correct the column"
            )


def _foreign(at: Path, given: Mapping[str, object], dialect: str) -> Iterator[Fault]:
    for key, value in given.items():
        if value is not None:
            yield Fault((*at, key), f"not used by a link of dialect '{dialect}'", "remove it")


def channel_set_faults(channels: tuple[Channel, ...]) -> Iterator[Fault]:
    """Rules of all channels together."""
    roles = Counter(channel.role for channel in channels)
    if roles["force"] != 1:
        allowed = "exactly one channel of role 'force'"
        do = "add the force channel" if not roles["force"] else "give the others role 'other'"
        yield Fault(("channels",), allowed, do, f"(a list with {roles['force']} force channels)")
    if roles["position"] > 1:
        allowed = "at most one channel of role 'position', the crosshead"
        value = f"(a list with {roles['position']} position channels)"
        yield Fault(("channels",), allowed, "give the others role 'deflection' or 'other'", value)
    for key in ("column", "label", "field"):
        yield from _shared_place_faults(channels, key)


def _shared_place_faults(channels: tuple[Channel, ...], key: str) -> Iterator[Fault]:
    first: dict[tuple[str, object], str] = {}
    for number, channel in enumerate(channels):
        place = getattr(channel, key)
        if place is None:
            continue
        other = first.setdefault((channel.link, place), channel.name)
        if other != channel.name:
            allowed = f"a {key} of its own; channel '{other}' has this one"
            yield Fault(("channels", number, key), allowed, f"correct the {key}")


def rail_faults(channels: tuple[Channel, ...], cell: Cell) -> Iterator[Fault]:
    """The converter must reach as far as the cell was verified, or a clipped force would be taken as true."""
    for number, channel in enumerate(channels):
        if channel.role != "force" or channel.counts_min is None or channel.counts_max is None:
            continue
        ends = (channel.counts_min, channel.counts_max)
        reach_n = max(channel.sign * (counts * channel.scale + channel.offset) for counts in ends)
        if reach_n < cell.verified_max_n:
            rail = "counts_max" if channel.sign * channel.scale > 0 else "counts_min"
            allowed = (
                f"rails that reach the verified maximum of {cell.verified_max_n:g} N, not only {reach_n:g} N"
            )
            yield Fault(
                ("channels", number, rail), allowed, "correct the rails, scale or cell.verified_max_n"
            )


def input_faults(
    number: int, status: StatusInput, links: Links | None, motion: Motion | None, motion_known: bool
) -> Iterator[Fault]:
    """Rules of one status input. motion_known: the card's motion table could be read (it may be absent)."""
    at: Path = ("inputs", number)
    if status.link is not None and links is not None and status.link not in links:
        yield Fault((*at, "link"), "the name of one of the links", _choose(links))
        return
    yield from _source_faults(at, status)
    if status.source == "reply" and motion_known:
        yield from _letter_faults(at, status, motion)
    if links is None or not motion_known:
        return
    link = links.get(status.link or (motion.link if motion is not None else next(iter(links))))
    if link is None:
        return
    if status.source == "column":
        yield from _place_faults(at, status, link)
        yield from _bit_faults(at, status, link)
    if status.source == "modem" and link.kind != "serial":
        allowed = f"'column' or 'reply', because link '{link.name}' is not a serial port"
        yield Fault((*at, "source"), allowed, "choose where the input is really read")


def _source_faults(at: Path, status: StatusInput) -> Iterator[Fault]:
    own = {"column": ("column", "field", "bit"), "reply": ("letter",), "modem": ("line",)}
    for source, keys in own.items():
        for key in keys:
            if source != status.source and getattr(status, key) not in (None, ""):
                yield Fault(
                    (*at, key), f"not used with source '{status.source}'", "remove it, or correct source"
                )
    if status.source == "modem" and status.line is None:
        yield Fault((*at, "line"), "one of 'cts', 'dsr', 'dcd', 'ri'", "add the line the switch is wired to")
    if status.source == "reply" and not status.letter:
        yield Fault((*at, "letter"), "one letter of the status word", "add the letter")


def _letter_faults(at: Path, status: StatusInput, motion: Motion | None) -> Iterator[Fault]:
    if motion is None or motion.status is None:
        do = "add [motion.status], or read the input from a column or a modem line"
        yield Fault((*at, "source"), "'reply' only with a status query", do)
    elif status.letter and status.letter in motion.status.letters_ignored:
        do = "remove it from letters_ignored, or correct the letter"
        yield Fault((*at, "letter"), "a letter that is not in motion.status.letters_ignored", do)


def _bit_faults(at: Path, status: StatusInput, link: Link) -> Iterator[Fault]:
    if status.bit is None or link.packets is None:
        return
    numbers = {field.name: field.number for field in link.packets.fields}
    number = numbers.get(status.field or "")
    if number is None:
        return
    if number.startswith("float"):
        yield Fault((*at, "bit"), f"no bit, because field '{status.field}' is {number}", "remove it")
    elif status.bit >= 8 * NUMBER_BYTES[number]:
        top = 8 * NUMBER_BYTES[number] - 1
        yield Fault(
            (*at, "bit"), f"0 to {top}, because field '{status.field}' is {number}", "correct the bit"
        )


def input_set_faults(inputs: tuple[StatusInput, ...]) -> Iterator[Fault]:
    """Rules of all inputs together: no two share a letter, a line or a bit."""
    seen: dict[tuple[object, ...], str] = {}
    for number, status in enumerate(inputs):
        place = (
            status.source,
            status.link,
            status.column,
            status.field,
            status.bit,
            status.letter,
            status.line,
        )
        other = seen.setdefault(place, status.name)
        if other != status.name:
            key = {"reply": "letter", "modem": "line"}.get(status.source, "bit")
            allowed = f"a {key} of its own; input '{other}' has this one"
            yield Fault(("inputs", number, key), allowed, f"correct the {key}")


def _choose(names: object) -> str:
    shown = ", ".join(str(name) for name in names) if isinstance(names, Mapping | list) else ""
    return f"choose one of {shown}" if shown else "add it first"
