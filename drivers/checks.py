"""Check values of rows and packets: sums, and CRCs by table, for one message or for a block of messages at
once.

Variants and the check value each has for the nine bytes "123456789" (names as in the public catalogue of
parametrised CRC algorithms):
  sum8   sum of the bytes modulo 256                                      0xDD
  xor8   exclusive or of the bytes                                        0x31
  crc8   CRC-8/SMBUS      polynomial 0x07, not reflected, start 0x00       0xF4
  crc16  CRC-16/MODBUS    polynomial 0x8005, reflected, start 0xFFFF       0x4B37
  crc32  CRC-32/ISO-HDLC  polynomial 0x04C11DB7, reflected, start and final
                          exclusive or all ones (= zlib)                   0xCBF43926
It refuses to know where in a message the check stands.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache, partial, reduce
from operator import xor
from typing import TypeAlias
from zlib import crc32

import numpy as np
import numpy.typing as npt

from daq.cards.frame import Check

Octets: TypeAlias = npt.NDArray[np.uint8]
Words: TypeAlias = npt.NDArray[np.uint32]
Indices: TypeAlias = npt.NDArray[np.intp]

CHECK_BYTES: dict[Check, int] = {"none": 0, "sum8": 1, "xor8": 1, "crc8": 1, "crc16": 2, "crc32": 4}
WEAK: frozenset[Check] = frozenset(("none", "sum8", "xor8", "crc8"))
"""One random message in 256 (or every one) passes: such a check alone does not prove a packet boundary."""


def _crc8_of(octet: int) -> int:
    for _ in range(8):
        octet = (octet << 1) ^ (0x107 if octet & 0x80 else 0)
    return octet


def _reflected_of(octet: int, polynomial: int) -> int:
    for _ in range(8):
        octet = (octet >> 1) ^ (polynomial if octet & 1 else 0)
    return octet


# Polynomials bit-reversed: 0x8005 -> 0xA001, 0x04C11DB7 -> 0xEDB88320.
CRC8 = tuple(_crc8_of(octet) for octet in range(256))
CRC16 = tuple(_reflected_of(octet, 0xA001) for octet in range(256))
CRC32 = tuple(_reflected_of(octet, 0xEDB88320) for octet in range(256))
_TABLES: dict[Check, Words] = {
    "crc8": np.array(CRC8, dtype=np.uint32),
    "crc16": np.array(CRC16, dtype=np.uint32),
    "crc32": np.array(CRC32, dtype=np.uint32),
}


def check_function(kind: Check) -> Callable[[bytes], int]:
    """The check of one message, as a function of the message alone."""
    return _sum8 if kind == "sum8" else partial(check_value, kind)


def _sum8(message: bytes) -> int:
    return sum(message) & 0xFF


def check_value(kind: Check, message: bytes) -> int:
    """The check of one message."""
    if kind == "sum8":
        return _sum8(message)
    if kind == "xor8":
        return reduce(xor, message, 0)
    if kind == "crc8":
        crc = 0
        for octet in message:
            crc = CRC8[crc ^ octet]
        return crc
    if kind == "crc16":
        crc = 0xFFFF
        for octet in message:
            crc = (crc >> 8) ^ CRC16[(crc ^ octet) & 0xFF]
        return crc
    return crc32(message) if kind == "crc32" else 0


def check_ranges(kind: Check, octets: Octets, start: Indices, stop: Indices) -> Words:
    """The checks of many messages octets[start:stop], not empty as a list, none longer than a few
    kilobytes."""
    length = stop - start
    width = max(int(length.max()), 1)
    back = np.arange(width, dtype=np.intp)[:, None]
    inside = back < length
    message = np.where(inside, octets[np.where(inside, stop - 1 - back, 0)], np.uint8(0))
    return _combine(kind, message, length)


def check_rows(kind: Check, messages: Octets) -> Words:
    """The checks of n messages of equal length, as the rows of an (n, k) matrix."""
    backwards = np.ascontiguousarray(messages.T[::-1])
    return _combine(kind, backwards, np.full(messages.shape[0], messages.shape[1], dtype=np.intp))


def _combine(kind: Check, backwards: Octets, length: Indices) -> Words:
    """backwards: (k, n), last byte of each message first, zeros before a message's beginning."""
    if kind == "sum8":
        sums: Words = backwards.sum(axis=0, dtype=np.uint8).astype(np.uint32)
        return sums
    if kind == "xor8":
        folded: Words = np.bitwise_xor.reduce(backwards, axis=0).astype(np.uint32)
        return folded
    # A CRC is linear over exclusive or: each byte contributes by its distance from the end, the start value
    # by the length; a zero byte contributes nothing, so ragged messages need no loop.
    width = backwards.shape[0]
    contribution, start = _contributions(kind, -(-width // 32) * 32)
    row = np.arange(width, dtype=np.intp)[:, None] * 256
    parts = contribution.take(row + backwards)
    found: Words = start.take(length) ^ np.bitwise_xor.reduce(parts, axis=0)
    return found


@lru_cache(maxsize=16)
def _contributions(kind: Check, width: int) -> tuple[Words, Words]:
    """(width * 256) contribution of a byte value at each distance from the end; (width + 1) of the start
    value."""
    table = _TABLES[kind]
    contribution = np.empty((width, 256), dtype=np.uint32)
    contribution[0] = table
    for distance in range(1, width):
        before = contribution[distance - 1]
        contribution[distance] = (before >> np.uint32(8)) ^ table[before & np.uint32(0xFF)]
    start = np.array([check_value(kind, bytes(length)) for length in range(width + 1)], dtype=np.uint32)
    return contribution.ravel(), start
