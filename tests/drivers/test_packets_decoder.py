"""Binary packets: every number type against struct, resynchronisation, damage, any cut of the bytes."""

import struct
import time

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from wire_frames import MOTION, Yield, cut, decode, packets_frame

from daq.errors import CardError
from drivers.checks import check_value
from drivers.packets import PacketsDecoder, PacketsEncoder

FORCE = [{"name": "force", "field": "f"}, {"name": "position", "field": "p", "unit": "mm"}]
FIELDS = [
    {"name": "c", "number": "uint16"},
    {"name": "f", "number": "int24"},
    {"name": "p", "number": "float32"},
    {"name": "s", "number": "uint8"},
]
INPUTS = [
    {"name": "shield_open", "source": "column", "field": "s", "bit": 0},
    {"name": "end_up", "source": "column", "field": "s", "bit": 7, "active_when": False},
]
BASE = {"sync": "a55a", "fields": FIELDS, "counter_field": "c", "reply_sync": "b66b"}


def card(check: str, **more) -> object:
    return packets_frame({**BASE, "checksum": check, **more}, FORCE, motion=MOTION, inputs=INPUTS)


CARDS = {
    "none": card("none"),
    "xor8": card("xor8", endian="big"),
    "crc8": card("crc8"),
    "crc16": card("crc16"),
    "crc32": card("crc32", endian="big", sync="a5"),
    "no counter": packets_frame(
        {"sync": "0d0a55", "fields": [{"name": "f", "number": "uint8"}, {"name": "p", "number": "int8"}]},
        FORCE,
    ),
}

# -- numbers


@pytest.mark.parametrize("endian", ["little", "big"])
@pytest.mark.parametrize(
    ("number", "letter", "values"),
    [
        ("int8", "b", (-128, -1, 0, 127)),
        ("uint8", "B", (0, 128, 255)),
        ("int16", "h", (-32768, -2, 32767)),
        ("uint16", "H", (0, 65535)),
        ("int32", "i", (-(2**31), -1, 2**31 - 1)),
        ("uint32", "I", (0, 2**32 - 1)),
        ("float32", "f", (-0.5, 3.25, float("inf"), float("nan"))),
        ("float64", "d", (1e300, -1 / 3, float("nan"))),
    ],
)
def test_numbers_are_those_of_struct(endian, number, letter, values):
    frame = packets_frame(
        {"sync": "fa", "endian": endian, "checksum": "crc32", "fields": [{"name": "f", "number": number}]},
        FORCE[:1],
    )
    stream = b""
    for value in values:
        body = b"\xfa" + struct.pack(("<" if endian == "little" else ">") + letter, value)
        stream += body + check_value("crc32", body).to_bytes(4, endian)
    for scalar_rows in (0, 10**9):
        found = [
            row[0] for _, row in decode(PacketsDecoder(frame, 0, scalar_rows=scalar_rows), [stream]).rows
        ]
        assert np.array_equal(found, values, equal_nan=True)


def test_a_signalling_nan_is_a_nan():
    """The bytes 7f800001: numpy warns when it widens them; a decoder must not (found by random bytes)."""
    frame = packets_frame(
        {"sync": "fa", "endian": "big", "fields": [{"name": "f", "number": "float32"}]}, FORCE[:1]
    )
    stream = bytes.fromhex("fa7f800001") * 3
    for scalar_rows in (0, 10**9):
        result = decode(PacketsDecoder(frame, 0, scalar_rows=scalar_rows), [stream])
        assert np.isnan([row[0] for _, row in result.rows]).all() and len(result.rows) == 3


@pytest.mark.parametrize("endian", ["little", "big"])
@pytest.mark.parametrize("number", ["int24", "uint24"])
def test_24_bit_numbers_have_the_sign_in_bit_23(endian, number):
    frame = packets_frame(
        {"sync": "fa", "endian": endian, "checksum": "crc16", "fields": [{"name": "f", "number": number}]},
        FORCE[:1],
    )
    values = (0, 1, 0x7FFFFF, 0x800000, 0xFFFFFF, 0xFFFFFE)
    stream = b""
    for value in values:
        body = b"\xfa" + value.to_bytes(3, endian)
        stream += body + check_value("crc16", body).to_bytes(2, endian)
    signed = (0, 1, 8388607, -8388608, -1, -2) if number == "int24" else values
    for scalar_rows in (0, 10**9):
        result = decode(PacketsDecoder(frame, 0, scalar_rows=scalar_rows), [stream])
        assert [row[0] for _, row in result.rows] == list(signed)


def test_channels_may_stand_in_any_order_and_share_nothing_with_skipped_fields():
    fields = [{"name": name, "number": "int16"} for name in ("p", "skip", "f")]
    frame = packets_frame({"sync": "fa", "checksum": "crc16", "fields": fields}, FORCE)
    body = b"\xfa" + struct.pack("<hhh", 1, 2, 3)
    stream = (body + struct.pack("<H", check_value("crc16", body))) * 3
    for scalar_rows in (0, 10**9):
        assert [
            row for _, row in decode(PacketsDecoder(frame, 0, scalar_rows=scalar_rows), [stream]).rows
        ] == [(3.0, 1.0)] * 3


def test_cards_that_cannot_be_decoded_are_refused():
    for packets in (
        {**BASE, "reply_sync": "a5"},
        {**BASE, "counter_field": "x"},
        {**BASE, "counter_field": "p"},
        {**BASE, "fields": FIELDS[:1]},
    ):
        with pytest.raises(CardError):
            PacketsDecoder(packets_frame(packets, FORCE), 0)


# -- streams

COUNTS = st.tuples(st.integers(-(2**23), 2**23 - 1), st.floats(width=32, allow_nan=True))
SMALL = st.tuples(st.integers(0, 255), st.integers(-128, 127))


@st.composite
def streams(draw, name):
    """Packets of a machine under this card, with gaps, repeats, damage, lost bytes, replies and junk
    between."""
    encoder, counter, out = PacketsEncoder(CARDS[name], 0), draw(st.integers(65500, 65600)), []
    for _ in range(draw(st.integers(0, 25))):
        values = np.array([draw(SMALL if name == "no counter" else COUNTS)], dtype=np.float64)
        status = draw(st.dictionaries(st.sampled_from(("shield_open", "end_up")), st.booleans(), max_size=2))
        packet = encoder.encode(values, first_counter=counter, inputs=status)
        kind = draw(st.sampled_from("rrrrrrgdxlpj"))
        if kind == "g":
            counter += draw(st.integers(1, 70000))
        elif kind == "d":
            out.append(packet)
        elif kind == "x":
            place = draw(st.integers(0, len(packet) - 1))
            packet = packet[:place] + draw(st.binary(max_size=2)) + packet[place + 1 :]
        elif kind == "l":
            packet = packet[: draw(st.integers(0, len(packet) - 1))]
        elif kind == "p":
            out.append(encoder.reply(draw(st.sampled_from((b"ok go", b"ST=R", b"", b"\xff", b"x" * 300)))))
        elif kind == "j":
            out.append(
                draw(st.one_of(st.binary(max_size=20), st.sampled_from((b"\xa5", b"\xa5Z", b"\xb6k", b"\r"))))
            )
        out.append(packet)
        counter += 1
    return b"".join(out)


@pytest.mark.slow
@pytest.mark.parametrize("name", CARDS)
@given(data=st.data())
@settings(max_examples=20, deadline=None)
def test_any_cut_and_both_ways_of_reading_give_the_same(name, data):
    stream = data.draw(streams(name))
    frame = CARDS[name]
    whole = decode(PacketsDecoder(frame, 0, scalar_rows=0), [stream]).same()
    assert decode(PacketsDecoder(frame, 0, scalar_rows=10**9), [stream]).same() == whole
    assert decode(PacketsDecoder(frame, 0), [bytes([octet]) for octet in stream]).same() == whole
    places = data.draw(st.lists(st.integers(0, 5000), max_size=8))
    assert decode(PacketsDecoder(frame, 0, scalar_rows=2), cut(stream, places)).same() == whole
    size = len(PacketsEncoder(frame, 0).encode(np.zeros((1, 2))))
    by_packet = cut(stream, range(0, len(stream), size))
    assert decode(PacketsDecoder(frame, 0), by_packet).same() == whole


@pytest.mark.slow
@pytest.mark.parametrize("name", CARDS)
@given(junk=st.lists(st.binary(max_size=600), max_size=6))
@settings(max_examples=20, deadline=None)
def test_no_bytes_raise_and_the_buffer_stays_small(name, junk):
    decoder = PacketsDecoder(CARDS[name], 0, scalar_rows=1)
    result = Yield()
    for number, piece in enumerate(junk):
        result.add(decoder.feed(piece, float(number)))
        assert decoder.buffered_bytes <= 600
    assert result.discarded_bytes <= sum(map(len, junk))


@pytest.mark.slow
@pytest.mark.parametrize("name", ["crc16", "crc32"])
@given(data=st.data())
@settings(max_examples=30, deadline=None)
def test_under_a_strong_check_no_number_appears_that_was_not_sent(name, data):
    """Whatever happens to the bytes, a decoded row is one of the rows sent, and resynchronisation needs no
    row."""
    encoder = PacketsEncoder(CARDS[name], 0)
    values = np.array([[100.0 * row, row + 0.5] for row in range(30)])
    packets = [encoder.encode(values[row : row + 1], first_counter=row) for row in range(30)]
    stream = bytearray(b"".join(packets))
    size = len(packets[0])
    hit = set()
    for _ in range(data.draw(st.integers(1, 5))):
        place = data.draw(st.integers(0, len(stream) - 1))
        stream[place] ^= data.draw(st.integers(1, 255))
        hit.add(place // size)
    result = decode(PacketsDecoder(CARDS[name], 0), [bytes(stream)])
    rows = {row for _, row in result.rows}
    sent = {tuple(row) for row in values.tolist()}
    assert rows <= sent
    assert {tuple(values[row].tolist()) for row in range(30) if row not in hit} <= rows


@pytest.mark.parametrize("name", [name for name in CARDS if name != "no counter"])
def test_received_is_rows_and_replies_and_discarded_and_buffered(name):
    encoder = PacketsEncoder(CARDS[name], 0)
    packets = [encoder.encode(np.array([[row, 0.5]]), first_counter=row) for row in range(300)]
    size = len(packets[0])
    reply = encoder.reply(b"ok go")
    stream = b"".join([*packets[:100], reply, b"\x00\x01junk", *packets[100:], packets[299], packets[0][:3]])
    result = decode(PacketsDecoder(CARDS[name], 0), cut(stream, (500, 1000, 1001)))
    assert result.discarded_bytes == 6
    assert result.rejected == {"duplicate": 1}
    assert len(result.rows) * size + size + len(reply) + 6 + result.buffered_bytes == len(stream)
    assert [index for index, _ in result.rows] == list(range(300))
    assert result.replies == [b"ok go"]


@pytest.mark.parametrize("name", ["crc8", "crc16", "crc32", "xor8"])
def test_a_damaged_packet_is_rejected_and_the_next_is_read(name):
    encoder = PacketsEncoder(CARDS[name], 0)
    packets = [bytearray(encoder.encode(np.array([[row, 0.5]]), first_counter=row)) for row in range(10)]
    packets[4][6] ^= 0x10
    result = decode(PacketsDecoder(CARDS[name], 0), [b"".join(map(bytes, packets))])
    assert result.rejected == {"checksum": 1}
    assert result.gaps == [(5, 1)]
    assert [row[0] for _, row in result.rows] == [0, 1, 2, 3, 5, 6, 7, 8, 9]
    assert result.discarded_bytes == len(packets[0])


def test_under_a_weak_check_a_false_sync_in_the_middle_is_not_believed():
    """Opened in the middle of a packet whose payload holds the sync: without a check only the follower
    tells."""
    frame = packets_frame(
        {"sync": "fa", "fields": [{"name": "f", "number": "uint16"}, {"name": "p", "number": "uint16"}]},
        FORCE,
    )
    sent = [(0x0102, 0xFA03), (0x0102, 0x0403), (0x0102, 0x0503), (0x0102, 0x0603)]
    packets = [b"\xfa" + struct.pack("<HH", *numbers) for numbers in sent]
    result = decode(PacketsDecoder(frame, 0), [packets[0][2:] + b"".join(packets[1:])])
    assert [row for _, row in result.rows] == sent[1:]
    assert result.discarded_bytes == 3


def test_once_in_step_a_packet_comes_out_with_its_last_byte():
    """Under any check: from the second packet on, none waits for the next."""
    for frame in CARDS.values():
        encoder, decoder = PacketsEncoder(frame, 0), PacketsDecoder(frame, 0)
        rows = [
            decoder.feed(encoder.encode(np.ones((1, 2)), first_counter=n), float(n)).rows for n in range(5)
        ]
        assert rows in ([1, 1, 1, 1, 1], [0, 2, 1, 1, 1])


def test_garbage_full_of_syncs_is_read_in_linear_time():
    """Nothing but sync bytes: twice as many take about twice as long, not four times (processor time, best of 3)."""

    def spent_s(count: int) -> float:
        times = []
        for _ in range(3):
            decoder = PacketsDecoder(CARDS["crc16"], 0)
            start_s = time.process_time()
            decoder.feed(b"\xa5\x5a" * count, 1.0)
            times.append(time.process_time() - start_s)
            assert decoder.buffered_bytes < 20
        return min(times)

    assert spent_s(8000) < 3.0 * 4 * spent_s(2000)


def test_status_inputs_come_with_the_first_packet_and_with_every_change():
    encoder = PacketsEncoder(CARDS["crc16"], 0)
    zeros = np.zeros((100, 2))
    stream = encoder.encode(zeros, first_counter=0)
    stream += encoder.encode(zeros[:1], first_counter=100, inputs={"shield_open": True, "end_up": True})
    stream += encoder.encode(zeros, first_counter=101)
    result = decode(PacketsDecoder(CARDS["crc16"], 0), [stream])
    assert result.inputs == [
        ("shield_open", False),
        ("end_up", False),
        ("shield_open", True),
        ("end_up", True),
        ("shield_open", False),
        ("end_up", False),
    ]


@pytest.mark.parametrize("name", ["xor8", "crc16", "crc32"])
def test_what_the_encoder_sends_the_decoder_reads(name):
    values = np.array([[row * 1000.0 - 8e6, row / 8.0] for row in range(1000)])
    stream = PacketsEncoder(CARDS[name], 0).encode(values, first_counter=65000)
    result = decode(PacketsDecoder(CARDS[name], 0), cut(stream, range(0, len(stream), 777)))
    assert np.array_equal([row for _, row in result.rows], values)
    assert result.gaps == [] and result.rejected == {} and result.discarded_bytes == 0
    assert [index for index, _ in result.rows] == list(range(1000))


def test_the_encoder_holds_counts_inside_the_converter():
    values = np.array([[1e9, 0.0], [-1e9, 0.0]])
    stream = PacketsEncoder(CARDS["crc16"], 0).encode(values)
    assert [row[0] for _, row in decode(PacketsDecoder(CARDS["crc16"], 0), [stream]).rows] == [
        8388607.0,
        -8388608.0,
    ]
