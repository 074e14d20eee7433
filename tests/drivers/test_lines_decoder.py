"""Text lines: the grammar, whole against cut against one by one, damage, counts that add up."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from wire_frames import MOTION, Yield, cut, decode, lines_frame

from daq.errors import CardError
from daq.stream.block import GAP_UNKNOWN
from drivers.checks import check_value
from drivers.lines import LinesDecoder, LinesEncoder
from drivers.rowtext import RowText

TWO = [{"name": "force", "column": 2}, {"name": "position", "column": 3, "unit": "mm"}]
PLAIN = {"prefix": "D", "counter_column": 1, "counter_modulus": 1000}
BARE = [{"name": "force", "column": 1}, {"name": "other", "column": 2, "unit": "mm"}]


def classify(lines: dict, channels: list[dict], line: bytes, **more):
    return RowText(lines_frame(lines, channels, **more), 0).classify(line)


# -- grammar


@pytest.mark.parametrize(
    ("line", "found"),
    [
        (b"1.5,-2", (1.5, -2.0)),
        (b" +1.5 ,\t-.25 ", (1.5, -0.25)),
        (b"1e3,2.E-1", (1000.0, 0.2)),
        (b"12.3 N,4mm", (12.3, 4.0)),
        (b"1,2,ignored,too", (1.0, 2.0)),
        (b"12.3 kN,4", "unit"),
        (b"12.3 mm,4", "unit"),
        (b"12.3,4 N", "unit"),
        (b"1", "fields"),
        (b"1,,2", "number"),
        (b"1,1_0", "number"),
        (b"1,0x10", "number"),
        (b"1,inf", "number"),
        (b"1,1e999", "number"),
        (b"1,1.2.3", "number"),
        (b"1,--2", "number"),
        (b"1,1 2", "number"),
        (b"1,\xb2", "number"),
        (b"", None),
        (b"  ", None),
        (b"READY", b"READY"),
        (b"R\xff", "text"),
        (b"1," + b"0" * 300, "overlong"),
    ],
)
def test_a_line_is_a_row_a_reply_or_rejected_for_a_reason(line, found):
    assert classify({}, BARE, line) == found


def test_nan_is_a_number_that_could_not_be_taken():
    row = classify({}, BARE, b"NaN,1")
    assert math.isnan(row[0]) and row[1] == 1.0


@pytest.mark.parametrize(
    ("lines", "line", "found"),
    [
        ({"separator": " "}, b"  1.5   2 ", (1.5, 2.0)),
        ({"separator": ";", "decimal_comma": True}, b"1,5;-2", (1.5, -2.0)),
        ({"separator": ";", "decimal_comma": True}, b"1.5;-2", "number"),
        ({"separator": "\t"}, b"1\t2", (1.0, 2.0)),
        ({"separator": "\t"}, b"\t1\t2", "number"),  # an empty first column, not a blank to skip
        ({"separator": ", "}, b"1, 2", (1.0, 2.0)),
        ({"separator": "::"}, b"1::2", (1.0, 2.0)),
        ({"columns": 2}, b"1,2,3", "fields"),
        ({"prefix": "#"}, b"#1,2", (1.0, 2.0)),
        ({"prefix": "#"}, b"1,2", "prefix"),  # a row whose first byte was damaged, not a reply
        ({"prefix": "#"}, b"ok", b"ok"),
    ],
)
def test_dialects(lines, line, found):
    assert classify(lines, BARE, line) == found


LABELS = [{"name": "force", "label": "F"}, {"name": "other", "label": "P", "unit": "mm"}]


@pytest.mark.parametrize(
    ("line", "found"),
    [
        (b"F=1.5,P=2", (1.5, 2.0)),
        (b"P=2mm, F = 1.5 N,T=20", (1.5, 2.0)),
        (b"F=1.5", "fields"),
        (b"F=1,F=1,P=2", "label"),
        (b"F=x,P=2", "number"),
        (b"hello", b"hello"),
    ],
)
def test_labels(line, found):
    assert classify({"label_separator": "="}, LABELS, line) == found


@pytest.mark.parametrize("kind", ["sum8", "xor8", "crc8", "crc16", "crc32"])
def test_a_declared_checksum_covers_everything_before_its_separator(kind):
    lines = {**PLAIN, "checksum": kind}
    body = b"D7,12.5,-3"
    digits = {"crc16": 4, "crc32": 8}.get(kind, 2)
    good = body + b",%0*X" % (digits, check_value(kind, body))
    assert classify(lines, TWO, good) == (12.5, -3.0, 7.0)
    assert classify(lines, TWO, good.lower().replace(b"d7", b"D7")) == (12.5, -3.0, 7.0)
    for place in range(1, len(good)):
        for bit in range(8):
            damaged = bytearray(good)
            damaged[place] ^= 1 << bit
            found = classify(lines, TWO, bytes(damaged))
            assert found == "checksum" or found == (12.5, -3.0, 7.0)  # the latter: case of a hex digit


def test_cards_that_cannot_be_decoded_are_refused():
    for lines, channels in (
        ({"decimal_comma": True}, BARE),
        ({"line_end": "\n\n"}, BARE),
        ({}, [{"name": "force"}]),
    ):
        with pytest.raises(CardError):
            LinesDecoder(lines_frame(lines, channels), 0)


# -- streams

DIALECTS = {
    "sum8": lines_frame({**PLAIN, "checksum": "sum8"}, TWO, motion=MOTION),
    "crc16 blanks": lines_frame(
        {"separator": " ", "prefix": "D ", "counter_column": 1, "line_end": "\n", "checksum": "crc16"}, TWO
    ),
    "crc32": lines_frame({**PLAIN, "checksum": "crc32", "line_bytes_max": 40}, TWO),
    "no check": lines_frame(PLAIN, TWO),
    "no prefix": lines_frame({"separator": ";", "decimal_comma": True}, BARE),
    "full rows": lines_frame({"columns": 3, "line_bytes_max": 20}, BARE),
    "labels": lines_frame({"label_separator": "=", "separator": " ", "decimal_comma": True}, LABELS),
    "two bytes": lines_frame({"separator": "::", "prefix": "D"}, BARE),
    "device time": lines_frame({"time_column": 3, "time_unit_s": 0.001, "line_end": "\r"}, BARE),
    "status": lines_frame(
        {**PLAIN},
        TWO,
        motion=MOTION,
        inputs=[
            {"name": "shield_open", "source": "column", "column": 4, "bit": 0},
            {"name": "end_up", "source": "column", "column": 4, "bit": 3, "active_when": False},
            {"name": "moving", "source": "column", "column": 5},
        ],
    ),
}
NUMBERS = st.one_of(
    st.integers(-(10**7), 10**7).map(float),
    st.decimals(-10000, 10000, places=3).map(float),
    st.floats(allow_nan=True, allow_infinity=False),
)
STATUS = st.dictionaries(st.sampled_from(("shield_open", "end_up", "moving")), st.booleans(), max_size=3)


@st.composite
def streams(draw, name):
    """Rows of a machine under this card, with what happens to rows: gaps, repeats, damage, replies, junk."""
    encoder = LinesEncoder(DIALECTS[name], 0)
    counter, out = draw(st.integers(0, 1200)), []
    for _ in range(draw(st.integers(0, 25))):
        kind = draw(st.sampled_from("rrrrrrgdxpjbo"))
        values = np.array([[draw(NUMBERS), draw(NUMBERS)]])
        row = encoder.encode(values, first_counter=counter, inputs=draw(STATUS))
        if kind == "g":
            counter += draw(st.integers(1, 900))
        elif kind == "d":
            out.append(row)
        elif kind == "x":
            place = draw(st.integers(0, len(row) - 1))
            row = row[:place] + draw(st.binary(max_size=2)) + row[place + 1 :]
        elif kind == "p":
            out.append(encoder.reply(draw(st.sampled_from((b"ok go", b"ST=R", b"what?", b"E 5 6")))))
        elif kind == "j":
            out.append(draw(st.binary(max_size=30)))
        elif kind == "b":
            out.append(encoder.reply(b""))
        elif kind == "o":
            out.append(b"7" * draw(st.integers(100, 400)))
        out.append(row)
        counter += 1
    return b"".join(out)


@pytest.mark.slow
@pytest.mark.parametrize("name", DIALECTS)
@given(data=st.data())
@settings(max_examples=20, deadline=None)
def test_any_cut_and_both_ways_of_reading_give_the_same(name, data):
    """Whole by numpy, whole line by line, byte by byte, in random pieces: rows, gaps, replies, counts
    agree."""
    stream = data.draw(streams(name))
    frame = DIALECTS[name]
    whole = decode(LinesDecoder(frame, 0, scalar_rows=0), [stream]).same()
    assert decode(LinesDecoder(frame, 0, scalar_rows=10**9), [stream]).same() == whole
    assert decode(LinesDecoder(frame, 0), [bytes([octet]) for octet in stream]).same() == whole
    places = data.draw(st.lists(st.integers(0, 5000), max_size=8))
    assert decode(LinesDecoder(frame, 0, scalar_rows=2), cut(stream, places)).same() == whole
    by_line = stream.splitlines(keepends=True)
    assert decode(LinesDecoder(frame, 0), by_line).same() == whole


@pytest.mark.slow
@pytest.mark.parametrize("name", DIALECTS)
@given(junk=st.lists(st.binary(max_size=600), max_size=6))
@settings(max_examples=25, deadline=None)
def test_no_bytes_raise_and_the_buffer_stays_small(name, junk):
    decoder = LinesDecoder(DIALECTS[name], 0, scalar_rows=1)
    result = Yield()
    for number, piece in enumerate(junk):
        result.add(decoder.feed(piece, float(number)))
        assert decoder.buffered_bytes <= 4097
    assert result.discarded_bytes <= sum(map(len, junk))


@pytest.mark.slow
@pytest.mark.parametrize("name", [name for name in DIALECTS if name not in ("device time",)])
@given(data=st.data())
@settings(max_examples=15, deadline=None)
def test_what_the_encoder_sends_the_decoder_reads(name, data):
    frame = DIALECTS[name]
    numbers = st.lists(st.tuples(NUMBERS, NUMBERS), min_size=2, max_size=90)
    counts = np.array(data.draw(numbers))
    stream = LinesEncoder(frame, 0).encode(counts, first_counter=998)
    result = decode(LinesDecoder(frame, 0), [stream])
    proven = frame.links[0].lines.prefix or frame.links[0].lines.checksum != "none"
    expected = counts if proven else counts[1:]  # the first line may be a fragment
    found = np.array([row for _, row in result.rows]).reshape(-1, 2)
    if name == "full rows" or name == "crc32":  # a long number can pass the line limit of these cards
        assert set(result.rejected) <= {"overlong", "partial"}
        return
    assert np.array_equal(found, expected, equal_nan=True)


NUMERALS = st.builds(
    "{}{}{}{}{}".format,
    st.sampled_from(("", "+", "-")),
    st.text("0123456789", max_size=18),
    st.sampled_from(("", ".")),
    st.text("0123456789", max_size=18),
    st.one_of(st.just(""), st.integers(-330, 330).map("e{}".format)),
)


@pytest.mark.slow
@given(texts=st.lists(NUMERALS, min_size=1, max_size=30))
@settings(max_examples=100, deadline=None)
def test_numbers_are_read_to_the_last_bit(texts):
    """The block reader agrees with Python's own correctly rounded float() on every number it accepts."""
    frame = lines_frame({"prefix": "D"}, [{"name": "force", "column": 1}])
    stream = b"".join(b"D%b\r\n" % text.encode() for text in texts)
    result = decode(LinesDecoder(frame, 0, scalar_rows=0), [stream])
    expected = []
    for text in texts:
        try:
            value = float(text)
        except ValueError:
            continue
        if math.isfinite(value):
            expected.append(value)
    assert np.array([row for _, row in result.rows]).ravel().tobytes() == np.array(expected).tobytes()


def test_received_is_rows_and_replies_and_discarded_and_buffered():
    frame = DIALECTS["sum8"]
    encoder = LinesEncoder(frame, 0)
    rows = [encoder.encode(np.array([[float(n), 0.5]]), first_counter=n) for n in range(300)]
    rows[7] = rows[7].replace(b"0.5", b"0.6")
    junk = b"\xff\x00\r\n"
    replies = encoder.reply(b"ok go") + encoder.reply(b"ST=")
    stream = b"".join([*rows[:100], junk, replies, *rows[100:], rows[299], b"D30"])
    result = decode(LinesDecoder(frame, 0), cut(stream, (1000, 2000, 2001)))
    kept = sum(len(row) for number, row in enumerate(rows) if number != 7) + len(rows[299])
    assert result.discarded_bytes + kept + len(replies) + result.buffered_bytes == len(stream)
    assert result.rejected == {"checksum": 1, "text": 1, "duplicate": 1}
    assert result.gaps == [(8, 1)]
    assert [index for index, _ in result.rows] == [n for n in range(300) if n != 7]
    assert result.buffered_bytes == 3


def test_an_overlong_line_is_counted_once_and_the_next_row_is_read():
    frame = lines_frame({**PLAIN, "line_bytes_max": 20}, TWO)
    stream = b"D1,2,3\r\n" + b"x" * 5000 + b"\r\nD2,3,4\r\n"
    decoder = LinesDecoder(frame, 0)
    result = decode(decoder, cut(stream, range(0, 5000, 100)))
    assert result.rejected == {"overlong": 1}
    assert [row for _, row in result.rows] == [(2.0, 3.0), (3.0, 4.0)]
    assert result.discarded_bytes == 5002


def test_the_first_line_after_opening_may_be_a_fragment():
    bare = LinesDecoder(lines_frame({}, BARE), 0)
    result = decode(bare, [b"3.5,7\r\n1.5,2\r\n"])  # may have been 113.5,7
    assert result.rejected == {"partial": 1}
    assert [row for _, row in result.rows] == [(1.5, 2.0)]
    assert result.gaps == []
    framed = LinesDecoder(DIALECTS["no check"], 0)
    assert decode(framed, [b"5,1,2\r\nD6,1,2\r\n"]).rejected == {"partial": 1}
    asked = LinesDecoder(DIALECTS["sum8"], 0)
    assert decode(asked, [b"ST=R\r\n"]).replies == [b"ST=R"]


def test_without_a_counter_a_lost_row_is_a_gap_of_unknown_length():
    result = decode(
        LinesDecoder(lines_frame({"prefix": "D"}, BARE), 0), [b"D1,2\r\nD1,x\r\nD2,3\r\nD3,4\r\n"]
    )
    assert result.gaps == [(1, GAP_UNKNOWN)]
    assert [index for index, _ in result.rows] == [0, 1, 2]


def test_status_inputs_come_with_the_first_row_and_with_every_change():
    frame = DIALECTS["status"]
    encoder = LinesEncoder(frame, 0)
    values = np.zeros((100, 2))
    calm = encoder.encode(values, first_counter=0)
    opened = encoder.encode(values[:1], first_counter=100, inputs={"shield_open": True, "moving": True})
    again = encoder.encode(values, first_counter=101, inputs={"shield_open": True})
    result = decode(LinesDecoder(frame, 0), [calm + opened + again])
    assert result.inputs == [
        ("shield_open", False),
        ("end_up", False),
        ("moving", False),
        ("shield_open", True),
        ("moving", True),
        ("moving", False),
    ]
    assert decode(LinesDecoder(frame, 0), [b"D1,2,3,0.5,0\r\nD2,2,3,nan,0\r\n"]).rejected == {"status": 2}


def test_rows_that_may_be_old_are_marked():
    decoder = LinesDecoder(DIALECTS["no check"], 0)
    assert decoder.feed(b"D1,0,0\r\nD2,0,0\r\n", 5.0).stale_rows == 2
    assert decoder.feed(b"D3,0,0\r\n", 5.049).stale_rows == 1
    assert decoder.feed(b"D4,0,0\r\n", 5.051).stale_rows == 0


def test_transmission_time_is_taken_off_on_a_serial_line():
    serial = {
        "kind": "serial",
        "host": None,
        "tcp_port": None,
        "port": "x",
        "speed_baud": 1000,
        "parity": "even",
    }
    frame = lines_frame({"prefix": "D"}, BARE, link=serial)
    decoder = LinesDecoder(frame, 0)
    row = b"D1,2\r\n"
    block = decoder.feed(row, 10.0).blocks[0]
    assert block.time_s[0] == pytest.approx(10.0 - len(row) * 11 / 1000)


FIELDS = st.sampled_from(
    (
        "1",
        "-2.5 N",
        " 3 ",
        "4mm",
        "5.25\tmm",
        "nan",
        "1e3",
        "",
        " ",
        "x",
        "5 kN",
        "+.5",
        "6.",
        "N",
        ".",
        "-",
        "--1",
        "123456789012345",
        "1234567890123456",
        "0.000000000000001",
        "7,5",
        "F=1",
        "P= 2 mm",
        "F=-3N",
        "P=",
        "=",
        "A7",
        "00",
    )
)


@pytest.mark.slow
@pytest.mark.parametrize(
    ("lines", "channels"),
    [
        ({}, BARE),
        ({"separator": ";", "decimal_comma": True}, BARE),
        ({"separator": " ", "prefix": "D"}, BARE),
        ({"separator": "\t", "columns": 2}, BARE),
        ({"label_separator": "="}, LABELS),
        ({"label_separator": "=", "separator": " "}, LABELS),
        ({"checksum": "sum8", "prefix": ">"}, BARE),
        ({"separator": " ", "checksum": "xor8"}, BARE[:1]),
    ],
)
@given(rows=st.lists(st.lists(FIELDS, min_size=0, max_size=4), min_size=1, max_size=12))
@settings(max_examples=60, deadline=None)
def test_odd_fields_are_read_the_same_by_the_block_and_by_the_line(lines, channels, rows):
    """The block reader accepts nothing the plain grammar rejects, and gives the same numbers."""
    frame = lines_frame(lines, channels)
    dialect = frame.links[0].lines
    stream = b""
    for number, fields in enumerate(rows):
        text = (dialect.prefix + dialect.separator.join(fields)).encode()
        if (
            dialect.checksum != "none" and number % 4
        ):  # every fourth has no check, or a field that may look like one
            text += dialect.separator.encode() + b"%02X" % check_value(dialect.checksum, text)
        stream += text + b"\r\n"
    by_block = decode(LinesDecoder(frame, 0, scalar_rows=0), [b"\r\n" + stream])
    by_line = decode(LinesDecoder(frame, 0, scalar_rows=10**9), [b"\r\n" + stream])
    assert by_block.same() == by_line.same()
