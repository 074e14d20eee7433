"""Rows read from the recorded raw bytes without any of midspan's decoders: the second opinion of the scenarios.

Knows only the two row forms that the scenarios' frames use; slow, short, and written apart from `drivers`.
"""

from __future__ import annotations

import struct
from collections.abc import Iterator
from dataclasses import dataclass
from functools import reduce

from daq.cards.derived import channels_of
from daq.cards.frame import FrameCard
from daq.cards.link import LinesDialect

PACKET_BYTES = 14
SYNC = b"\xa5\x5a"


@dataclass(frozen=True, slots=True)
class WireRow:
    """counter: as the device sent it, None where the card has none."""

    counter: int | None
    counts: tuple[float, ...]


def rows_in(frame: FrameCard, link: int, data: bytes) -> list[WireRow]:
    """Every undamaged row in these bytes, in order."""
    card = frame.links[link]
    if card.lines is not None:
        return list(_lines(frame, link, card.lines, data))
    return list(_packets(data, [c.field or "" for c in channels_of(frame, link)]))


def _lines(frame: FrameCard, link: int, lines: LinesDialect, data: bytes) -> Iterator[WireRow]:
    prefix = lines.prefix.encode()
    columns = [(channel.column or 0) - 1 for channel in channels_of(frame, link)]
    for line in data.split(b"\r\n")[:-1]:
        body, comma, check = line.rpartition(b",")
        if not (comma and body.startswith(prefix)) or check != b"%02X" % _check(lines.checksum, body):
            continue
        fields = body[len(prefix) :].split(b",")
        try:
            counter = int(fields[lines.counter_column - 1]) if lines.counter_column is not None else None
            yield WireRow(counter, tuple(float(fields[column]) for column in columns))
        except ValueError:
            continue  # damaged, and the weak sum did not show it: no number


def _check(kind: str, body: bytes) -> int:
    return sum(body) % 256 if kind == "sum8" else reduce(lambda a, b: a ^ b, body)


def _packets(data: bytes, names: list[str]) -> Iterator[WireRow]:
    """sync 2, counter 2, force 3, position 4, status 1, CRC 2; little-endian; the CRC is over all before it."""
    at = data.find(SYNC)
    while 0 <= at <= len(data) - PACKET_BYTES:
        packet = data[at : at + PACKET_BYTES]
        if _crc16(packet[:-2]) == int.from_bytes(packet[-2:], "little"):
            counter, position = struct.unpack_from("<H", packet, 2)[0], struct.unpack_from("<i", packet, 7)[0]
            force = int.from_bytes(packet[4:7], "little", signed=True)
            known = {"force": float(force), "position": float(position)}
            yield WireRow(counter, tuple(known[name] for name in names))
            at += PACKET_BYTES - 1
        at = data.find(SYNC, at + 1)


def _crc16(data: bytes) -> int:
    """CRC-16/MODBUS, bit by bit from its definition (check value of "123456789": 0x4B37)."""
    crc = 0xFFFF
    for octet in data:
        crc ^= octet
        for _ in range(8):
            crc = (crc >> 1) ^ (0xA001 if crc & 1 else 0)
    return crc
