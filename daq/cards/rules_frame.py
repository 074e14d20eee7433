"""Cross rules of a whole frame card. Works on readable parts: one bad key hides no other fault."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import TypeVar

from pydantic import ValidationError

from daq.cards.base import Card
from daq.cards.faults import Fault
from daq.cards.frame import Cell, Channel, Compliance, Fixture, FrameCard, Link, Motion, StatusInput
from daq.cards.rules_channels import (
    channel_faults,
    channel_set_faults,
    input_faults,
    input_set_faults,
    rail_faults,
)
from daq.cards.rules_links import link_faults, speed_faults
from daq.cards.rules_motion import motion_faults

Part = TypeVar("Part", bound=Card)


@dataclass(frozen=True, slots=True)
class FrameParts:
    """The readable parts of a frame card. None in a list: an item that could not be read."""

    cell: Cell | None
    links: tuple[Link | None, ...]
    channels: tuple[Channel | None, ...]
    inputs: tuple[StatusInput | None, ...]
    motion: Motion | None
    motion_known: bool  # motion was read, or is really absent
    fixtures: tuple[Fixture | None, ...]
    compliance: Compliance | None


def parts_of(tree: Mapping[str, object]) -> FrameParts:
    """Read every part of a card by itself."""
    motion = _part(Motion, tree.get("motion"))
    return FrameParts(
        cell=_part(Cell, tree.get("cell")),
        links=_list(Link, tree.get("links")),
        channels=_list(Channel, tree.get("channels")),
        inputs=_list(StatusInput, tree.get("inputs", ())),
        motion=motion,
        motion_known=motion is not None or tree.get("motion") is None,
        fixtures=_list(Fixture, tree.get("fixtures")),
        compliance=_part(Compliance, tree.get("compliance")),
    )


def parts_of_card(card: FrameCard) -> FrameParts:
    """All parts of a valid card."""
    return FrameParts(
        card.cell, card.links, card.channels, card.inputs, card.motion, True, card.fixtures, card.compliance
    )


def _part(model: type[Part], tree: object) -> Part | None:
    try:
        return model.model_validate(tree)
    except ValidationError:
        return None


def _list(model: type[Part], tree: object) -> tuple[Part | None, ...]:
    """(None,) for a list that is no list: it is then never whole."""
    return (
        tuple(_part(model, item) for item in tree) if isinstance(tree, tuple) and tree else _not_a_list(tree)
    )


def _not_a_list(tree: object) -> tuple[None, ...]:
    return () if tree == () else (None,)


def whole(items: tuple[Part | None, ...]) -> tuple[Part, ...] | None:
    """The list when every item could be read, else None: rules on the whole list must then wait."""
    found = tuple(item for item in items if item is not None)
    return found if len(found) == len(items) else None


def frame_faults(parts: FrameParts) -> Iterator[Fault]:
    """Every cross rule of a frame card."""
    links = whole(parts.links)
    by_name = None if links is None else _by_name(links)
    for number, link in _read(parts.links):
        yield from link_faults(number, link)
    yield from _port_faults(parts.links)
    for key, items in _named_lists(parts):
        yield from _name_faults(key, items)
    for number, channel in _read(parts.channels):
        yield from channel_faults(number, channel, by_name)
    channels = whole(parts.channels)
    if channels is not None:
        yield from channel_set_faults(channels)
        if parts.cell is not None:
            yield from rail_faults(channels, parts.cell)
    for number, status in _read(parts.inputs):
        yield from input_faults(number, status, by_name, parts.motion, parts.motion_known)
    inputs = whole(parts.inputs)
    if inputs is not None:
        yield from input_set_faults(inputs)
    if parts.motion is not None:
        yield from motion_faults(parts.motion, by_name)
    for number, fixture in _read(parts.fixtures):
        yield from fixture_faults(number, fixture)
    if parts.cell is not None:
        yield from cell_faults(parts.cell)
    if parts.compliance is not None:
        yield from compliance_faults(parts.compliance, whole(parts.fixtures), parts.cell)


def _by_name(links: tuple[Link, ...]) -> dict[str, Link] | None:
    """Links by name; None when two share one: rules that follow a name must then wait."""
    found = {link.name: link for link in links}
    return found if len(found) == len(links) else None


def row_faults(card: FrameCard) -> Iterator[Fault]:
    """Row sizes against speeds; silent while a link that is referred to does not exist."""
    names = {link.name for link in card.links}
    used = {status.link for status in card.inputs if status.link is not None}
    if card.motion is not None:
        used.add(card.motion.link)
    if used <= names and len(names) == len(card.links):
        yield from speed_faults(card)


def _read(items: tuple[Part | None, ...]) -> Iterator[tuple[int, Part]]:
    for number, item in enumerate(items):
        if item is not None:
            yield number, item


def _named_lists(parts: FrameParts) -> Iterator[tuple[str, tuple[object, ...]]]:
    yield "links", parts.links
    yield "channels", parts.channels
    yield "inputs", parts.inputs
    yield "fixtures", parts.fixtures


def _name_faults(key: str, items: tuple[object, ...]) -> Iterator[Fault]:
    seen: dict[str, int] = {}
    for number, item in enumerate(items):
        name = getattr(item, "name", None)
        if not isinstance(name, str):
            continue
        first = seen.setdefault(name, number)
        if first != number:
            allowed = f"a name of its own; entry #{first + 1} of {key} has this one"
            yield Fault((key, number, "name"), allowed, "rename one of the two")


def _port_faults(links: tuple[Link | None, ...]) -> Iterator[Fault]:
    seen: dict[tuple[str, object], str] = {}
    for number, link in _read(links):
        keys = ("port", "device_serial") if link.kind == "serial" else ("tcp_port",)
        for key in keys:
            value = getattr(link, key)
            place = (key, value if link.kind == "serial" else (link.host, value))
            other = link.name if value is None else seen.setdefault(place, link.name)
            if other != link.name:
                allowed = f"a port of its own; link '{other}' has this one"
                yield Fault(("links", number, key), allowed, "correct one of the two")


def cell_faults(cell: Cell) -> Iterator[Fault]:
    """Verified range inside the capacity, dates in order."""
    if cell.verified_min_n >= cell.verified_max_n:
        allowed = f"less than verified_max_n = {cell.verified_max_n:g} N"
        yield Fault(("cell", "verified_min_n"), allowed, "take both from the verification certificate")
    if cell.verified_max_n > cell.capacity_n:
        allowed = f"at most the capacity of {cell.capacity_n:g} N"
        yield Fault(("cell", "verified_max_n"), allowed, "take it from the verification certificate")
    if (
        cell.verified_on is not None
        and cell.verified_due is not None
        and cell.verified_due <= cell.verified_on
    ):
        allowed = f"a day after verified_on = {cell.verified_on.isoformat()}"
        yield Fault(("cell", "verified_due"), allowed, "correct one of the two days")
    if abs(cell.zero_balance_n) >= cell.capacity_n:
        allowed = f"less than the capacity of {cell.capacity_n:g} N, in either direction"
        yield Fault(
            ("cell", "zero_balance_n"), allowed, "read the gross force of the clean, unloaded fixture again"
        )


def fixture_faults(number: int, fixture: Fixture) -> Iterator[Fault]:
    """Spans that fit the geometry, rollers that fit the span."""
    at = ("fixtures", number)
    support, load = fixture.support_span_mm, fixture.load_span_mm
    if fixture.geometry == "3-point" and load != 0.0:
        yield Fault((*at, "load_span_mm"), "0 mm for a 3-point fixture", "remove it, or correct geometry")
    if fixture.geometry == "4-point" and not 0.0 < load < support:
        allowed = f"> 0 and less than support_span_mm = {support:g} mm"
        yield Fault((*at, "load_span_mm"), allowed, "measure both spans again")
    room = (support - load) / 2.0 if fixture.geometry == "4-point" else support / 2.0
    if 0.0 < room <= fixture.roller_diameter_mm / 2.0:
        allowed = f"less than {2.0 * room:g} mm, or the rollers would touch"
        yield Fault((*at, "roller_diameter_mm"), allowed, "correct the diameter or the spans")
    uncertain = ("support_span_u_mm", "load_span_u_mm")[: 2 if fixture.geometry == "4-point" else 1]
    for key in uncertain:
        if getattr(fixture, key) >= support / 2.0:
            allowed = f"less than {support / 2.0:g} mm, half the support span"
            yield Fault(
                (*at, key),
                allowed,
                "enter the half-width of the uncertainty, not the span",
                repr(getattr(fixture, key)),
            )


def compliance_faults(
    table: Compliance, fixtures: tuple[Fixture, ...] | None, cell: Cell | None
) -> Iterator[Fault]:
    """Monotone, and measured with the fixture and the cell of this card."""
    if fixtures is not None and table.fixture not in {fixture.name for fixture in fixtures}:
        do = "choose one of " + ", ".join(fixture.name for fixture in fixtures)
        yield Fault(("compliance", "fixture"), "the name of one of the fixtures", do)
    if cell is not None and table.cell_serial != cell.serial:
        allowed = f"'{cell.serial}', the cell of this card: another cell voids the table"
        yield Fault(
            ("compliance", "cell_serial"), allowed, "repeat the compliance run, or remove [compliance]"
        )
    pairs = zip(table.points, table.points[1:], strict=False)
    for number, (before, after) in enumerate(pairs, start=1):
        at = ("compliance", "points", number)
        if after.force_n <= before.force_n:
            allowed = f"more than {before.force_n:g} N, the force of the point before"
            yield Fault((*at, "force_n"), allowed, "sort the points by force, each force once")
        if after.deflection_um < before.deflection_um:
            allowed = f"at least {before.deflection_um:g} um, the deflection of the point before"
            yield Fault(
                (*at, "deflection_um"), allowed, "the table must not fall: check the sign, measure again"
            )
    if table.points[-1].deflection_um <= table.points[0].deflection_um:
        allowed = "a table that rises from its first to its last point"
        yield Fault(("compliance", "points"), allowed, "measure again: no frame is perfectly rigid")
    if cell is not None and table.points[-1].force_n > cell.capacity_n:
        allowed = f"at most the capacity of {cell.capacity_n:g} N"
        yield Fault(
            ("compliance", "points", len(table.points) - 1, "force_n"),
            allowed,
            "correct the unit or the table",
        )
