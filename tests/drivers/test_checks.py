"""Check values against the published ones, against zlib, and one by one against many at once."""

import zlib

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from drivers.checks import CHECK_BYTES, check_ranges, check_rows, check_value

KINDS = ("sum8", "xor8", "crc8", "crc16", "crc32")
MESSAGES = st.lists(st.binary(max_size=40), min_size=1, max_size=20)


@pytest.mark.parametrize(
    ("kind", "published"),
    [
        ("crc8", 0xF4),  # CRC-8/SMBUS
        ("crc16", 0x4B37),  # CRC-16/MODBUS
        ("crc32", 0xCBF43926),  # CRC-32/ISO-HDLC
    ],
)
def test_published_check_values_of_the_nine_digits(kind, published):
    assert check_value(kind, b"123456789") == published
    rows = np.frombuffer(b"123456789" * 3, dtype=np.uint8).reshape(3, 9)
    assert check_rows(kind, rows).tolist() == [published] * 3


def test_a_modbus_frame_as_printed_in_textbooks():
    """Request 'read one register of device 1': 01 03 00 00 00 01, check sent low byte first as 84 0A."""
    assert check_value("crc16", bytes.fromhex("010300000001")) == 0x0A84


def test_sums_by_hand():
    assert check_value("sum8", bytes((200, 100, 3))) == (303) % 256
    assert check_value("xor8", bytes((0b1100, 0b1010))) == 0b0110
    assert check_value("none", b"anything") == 0


@given(st.binary(max_size=100))
@settings(max_examples=50, deadline=None)
def test_crc32_is_zlibs(message):
    assert check_value("crc32", message) == zlib.crc32(message)


@pytest.mark.parametrize("kind", KINDS)
@given(messages=MESSAGES)
@settings(max_examples=40, deadline=None)
def test_ragged_messages_at_once_are_the_same_as_one_by_one(kind, messages):
    octets = np.frombuffer(b"".join(messages) + b"\x00", dtype=np.uint8)
    stop = np.cumsum([len(message) for message in messages])
    start = np.concatenate(([0], stop[:-1]))
    found = check_ranges(kind, octets, start, stop)
    assert found.tolist() == [check_value(kind, message) for message in messages]


@pytest.mark.parametrize("kind", KINDS)
@given(data=st.binary(min_size=12, max_size=360))
@settings(max_examples=40, deadline=None)
def test_equal_messages_at_once_are_the_same_as_one_by_one(kind, data):
    rows = np.frombuffer(data[: len(data) // 12 * 12], dtype=np.uint8).reshape(-1, 12)
    assert check_rows(kind, rows).tolist() == [check_value(kind, row.tobytes()) for row in rows]


@pytest.mark.parametrize("kind", KINDS)
def test_every_single_flipped_bit_shows(kind):
    message = bytes(range(30))
    good = check_value(kind, message)
    assert good < 256 ** CHECK_BYTES[kind]
    for bit in range(8 * len(message)):
        damaged = bytearray(message)
        damaged[bit // 8] ^= 1 << bit % 8
        assert check_value(kind, bytes(damaged)) != good
