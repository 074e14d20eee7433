"""PacketForm: how one packet of a card is laid out, and the numbers in it, one by one or many at once. Pure.

A packet is sync, fields in order, check. The check runs over everything before it, sync included, and
stands in the card's byte order. A counter is read unsigned, its modulus is its width.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass

import numpy as np

from daq.cards.derived import channels_of
from daq.cards.frame import Check, FrameCard, Number, PacketsDialect
from daq.errors import CardError
from daq.stream.block import Floats
from drivers.checks import CHECK_BYTES, Octets, Words, check_rows, check_value
from drivers.plan import InputRule, RowPlan, inputs_in_rows, link_of

WIDTH: dict[Number, int] = {
    "int8": 1,
    "uint8": 1,
    "int16": 2,
    "uint16": 2,
    "int24": 3,
    "uint24": 3,
    "int32": 4,
    "uint32": 4,
    "float32": 4,
    "float64": 8,
}
_STRUCT: dict[Number, str] = {
    "int8": "b",
    "uint8": "B",
    "int16": "h",
    "uint16": "H",
    "int24": "3s",
    "uint24": "3s",
    "int32": "i",
    "uint32": "I",
    "float32": "f",
    "float64": "d",
}
_UNSIGNED: dict[Number, Number] = {"int8": "uint8", "int16": "uint16", "int24": "uint24", "int32": "uint32"}


@dataclass(frozen=True, slots=True)
class Place:
    """One wanted field: where it begins in the packet and what number stands there."""

    offset: int
    number: Number


class PacketForm:
    """Layout of one link's packets; reads and writes rows of numbers in plan order."""

    def __init__(self, frame: FrameCard, link_number: int) -> None:
        link = link_of(frame, link_number)
        dialect = link.packets
        if dialect is None:
            raise CardError((f"link {link.name}: dialect = packets: needs a [links.packets] table",))
        self.dialect = dialect
        self.sync = bytes.fromhex(dialect.sync)
        self.check: Check = dialect.checksum
        self.body_bytes = len(self.sync) + sum(WIDTH[each.number] for each in dialect.fields)
        self.bytes = self.body_bytes + CHECK_BYTES[self.check]
        self.places, self.plan = _wanted(frame, link_number, dialect, len(self.sync))
        self._sign = "<" if dialect.endian == "little" else ">"
        self._endian = dialect.endian
        self._layout, self._order_of, self._three = self._compile()
        self._sync_octets = np.frombuffer(self.sync, dtype=np.uint8)

    # -- one packet

    def passes(self, data: bytes, at: int) -> bool:
        """The declared check of the packet at that place matches (always, where none is declared)."""
        if self.check == "none":
            return True
        body = at + self.body_bytes
        stated = int.from_bytes(data[body : at + self.bytes], self._endian)
        return stated == check_value(self.check, data[at:body])

    def row(self, data: bytes, at: int) -> tuple[float, ...]:
        """The numbers of the packet at that place, in plan order."""
        raw = self._layout.unpack_from(data, at)
        if not self._three:
            return raw if self._order_of is None else tuple([raw[index] for index in self._order_of])
        found = list(raw)
        for index, signed in self._three:
            found[index] = int.from_bytes(found[index], self._endian, signed=signed)
        return tuple(found) if self._order_of is None else tuple([found[index] for index in self._order_of])

    # -- many packets

    def good_rows(self, packets: Octets) -> int:
        """packets: (n, bytes). How many, from the first on, have sync and check right."""
        good = (packets[:, : len(self.sync)] == self._sync_octets).all(axis=1)
        run = int(good.argmin()) if not good.all() else len(good)
        if self.check == "none" or run == 0:
            return run
        wanted = check_rows(self.check, packets[:run, : self.body_bytes])
        good = wanted == self._stated(packets[:run, self.body_bytes :])
        return int(good.argmin()) if not good.all() else run

    def rows(self, packets: Octets) -> Floats:
        """packets: (n, bytes) -> (n, w) numbers."""
        values = np.empty((len(packets), len(self.places)))
        for position, place in enumerate(self.places):
            part = packets[:, place.offset : place.offset + WIDTH[place.number]]
            values[:, position] = self._numbers(part, place.number)
        return values

    def pack(self, values: Floats) -> bytes:
        """(n, w) numbers -> packets; integers are rounded and held inside their range; unwanted fields are
        zero."""
        packets = np.zeros((len(values), self.bytes), dtype=np.uint8)
        packets[:, : len(self.sync)] = self._sync_octets
        for position, place in enumerate(self.places):
            part = self._octets_of(values[:, position], place.number)
            packets[:, place.offset : place.offset + WIDTH[place.number]] = part
        if self.check != "none" and len(values):
            check = check_rows(self.check, packets[:, : self.body_bytes])
            width = CHECK_BYTES[self.check]
            octets = check.astype(">u4").view(np.uint8).reshape(-1, 4)[:, 4 - width :]
            packets[:, self.body_bytes :] = octets if self._endian == "big" else octets[:, ::-1]
        return packets.tobytes()

    def _stated(self, octets: Octets) -> Words:
        ordered = octets if self._endian == "big" else octets[:, ::-1]
        stated = np.zeros(len(octets), dtype=np.uint32)
        for column in range(ordered.shape[1]):
            stated = (stated << np.uint32(8)) | ordered[:, column]
        return stated

    def _numbers(self, part: Octets, number: Number) -> Floats:
        width = WIDTH[number]
        if width == 3:
            return _whole_24(part if self._endian == "little" else part[:, ::-1], signed=number == "int24")
        typed = np.ascontiguousarray(part).view(f"{self._sign}{number[0]}{width}")
        with np.errstate(invalid="ignore"):  # a signalling NaN is a NaN, not a warning
            return typed[:, 0].astype(np.float64)

    def _octets_of(self, values: Floats, number: Number) -> Octets:
        width = WIDTH[number]
        if number[0] == "f":
            typed = values.astype(f"{self._sign}f{width}")
            return typed.view(np.uint8).reshape(-1, width)
        bits = 8 * width
        low, high = (-(2 ** (bits - 1)), 2 ** (bits - 1) - 1) if number[0] == "i" else (0, 2**bits - 1)
        known = np.where(np.isnan(values), 0.0, values)
        whole = np.clip(np.rint(known), low, high).astype(np.int64)
        octets = whole.astype(">i8").view(np.uint8).reshape(-1, 8)[:, 8 - width :]
        return octets if self._endian == "big" else octets[:, ::-1]

    def _compile(self) -> tuple[struct.Struct, tuple[int, ...] | None, tuple[tuple[int, bool], ...]]:
        """The layout of the wanted fields in wire order, plan position -> wire index, and the 24 bit ones."""
        text, end = self._sign, 0
        wire = sorted(set(self.places), key=lambda place: place.offset)
        for place in wire:
            text += f"{place.offset - end}x{_STRUCT[place.number]}"
            end = place.offset + WIDTH[place.number]
        order = tuple(wire.index(place) for place in self.places)
        three = [
            (index, place.number == "int24") for index, place in enumerate(wire) if WIDTH[place.number] == 3
        ]
        plain = order == tuple(range(len(wire)))
        return struct.Struct(text), None if plain else order, tuple(three)


def _whole_24(part: Octets, *, signed: bool) -> Floats:
    """(n, 3) little-endian octets; the sign bit is bit 23."""
    whole = part[:, 0].astype(np.int32) | part[:, 1].astype(np.int32) << 8 | part[:, 2].astype(np.int32) << 16
    if signed:
        whole = (whole ^ 0x800000) - 0x800000
    return whole.astype(np.float64)


def _wanted(
    frame: FrameCard, link_number: int, dialect: PacketsDialect, begin: int
) -> tuple[tuple[Place, ...], RowPlan]:
    found: dict[str, Place] = {}
    for field in dialect.fields:
        found.setdefault(field.name, Place(begin, field.number))
        begin += WIDTH[field.number]
    channels = channels_of(frame, link_number)
    places = [_place(found, channel.field or channel.name, f"channel {channel.name}") for channel in channels]

    def special(place: Place) -> int:
        if place not in places[len(channels) :]:
            places.append(place)
        return places.index(place, len(channels))

    counter = (
        None
        if dialect.counter_field is None
        else _unsigned(_place(found, dialect.counter_field, "counter_field"))
    )
    time = None if dialect.time_field is None else _place(found, dialect.time_field, "time_field")
    if time is not None and time.number[0] != "f":
        time = _unsigned(time)
    plan = RowPlan(
        channels=len(channels),
        counter=None if counter is None else special(counter),
        modulus=None if counter is None else 256 ** WIDTH[counter.number],
        time=None if time is None else special(time),
        time_unit_s=dialect.time_unit_s or 1.0,
        time_modulus=None if time is None or time.number[0] == "f" else 256 ** WIDTH[time.number],
        inputs=tuple(
            InputRule(
                status.name,
                special(_place(found, status.field or "", f"input {status.name}")),
                status.bit,
                status.active_when,
            )
            for status in inputs_in_rows(frame, link_number)
        ),
    )
    return tuple(places), plan


def _place(found: dict[str, Place], name: str, wanted_by: str) -> Place:
    if name not in found:
        known = ", ".join(found)
        raise CardError(
            (f"{wanted_by}: field = {name!r}: not in the packet ({known}): name one of its fields",)
        )
    return found[name]


def _unsigned(place: Place) -> Place:
    if place.number[0] == "f":
        raise CardError((f"counter_field: {place.number}: a counter must be an integer field",))
    return Place(place.offset, _UNSIGNED.get(place.number, place.number))
