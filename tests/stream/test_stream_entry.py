"""Entries: bytes and back, and nothing but sound entries back."""

import struct
import zlib
from random import Random

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from made_entries import STREAM, entries, packed

from daq.stream.entry import (
    ENTRY_BYTES_MAX,
    PAYLOAD_BYTES_MAX,
    Entry,
    EntryDamaged,
    Kind,
    PayloadTooLong,
    entry_bytes,
    gather,
    pack,
    pack_all,
    unpack,
    unpack_all,
)

U64 = st.integers(0, 2**64 - 1)
ANY_ENTRY = st.builds(Entry, st.sampled_from(Kind), U64, U64, U64, st.binary(max_size=300))


@settings(deadline=None, max_examples=100)
@given(ANY_ENTRY, st.binary(max_size=20), st.binary(max_size=20))
def test_any_entry_comes_back_from_the_middle_of_any_buffer(
    entry: Entry, before: bytes, behind: bytes
) -> None:
    data = pack(entry)
    assert len(data) % 8 == 0
    assert len(data) == entry_bytes(len(entry.payload))
    for buffer in (before + data + behind, memoryview(before + data + behind)):
        assert unpack(buffer, len(before)) == (entry, len(before) + len(data))


def test_the_layout_is_the_documented_one() -> None:
    """Decoded with struct and zlib alone, as a stranger would."""
    data = pack(Entry(Kind.EVENT, 0x1122, 7, 99, b"{}x"))
    fields = struct.unpack("<4sBBHIQQQI", data[:40])
    assert fields[:8] == (b"MsEn", 1, 3, 0, 3, 0x1122, 7, 99)
    assert fields[8] == zlib.crc32(data[:36] + b"{}x")
    assert data[40:] == b"{}x\0\0\0\0\0"


@pytest.mark.parametrize("length", [0, 1, 7, 8, 61])
def test_damage_of_any_byte_and_any_cut_is_refused(length: int) -> None:
    data = pack(Entry(Kind.BLOCK, 5, 6, 7, Random(length).randbytes(length)))
    for place in range(len(data)):
        for flip in (0x01, 0x80, 0xFF):
            damaged = bytearray(data)
            damaged[place] ^= flip
            with pytest.raises(EntryDamaged):
                unpack(bytes(damaged))
    for cut in range(len(data)):
        with pytest.raises(EntryDamaged):
            unpack(data[:cut])


@settings(deadline=None, max_examples=200)
@given(st.binary(max_size=200))
def test_garbage_is_refused_with_a_reason(garbage: bytes) -> None:
    for data in (garbage, b"MsEn\x01" + garbage):
        with pytest.raises(EntryDamaged) as caught:
            unpack(data)
        assert caught.value.why


def test_the_largest_payload_is_the_bound() -> None:
    assert len(pack(Entry(Kind.RAW, 1, 1, 1, bytes(PAYLOAD_BYTES_MAX)))) == ENTRY_BYTES_MAX
    with pytest.raises(PayloadTooLong):
        pack(Entry(Kind.RAW, 1, 1, 1, bytes(PAYLOAD_BYTES_MAX + 1)))


@settings(deadline=None, max_examples=60)
@given(st.integers(0, 2**32), st.integers(1, 12), st.data())
def test_gather_takes_whole_entries_and_leaves_the_rest(seed: int, count: int, data: st.DataObject) -> None:
    listed = entries(1, count, Random(seed), 40)
    buffer = b"".join(map(pack, listed))
    cut = data.draw(st.integers(0, len(buffer)))
    whole = [entry for entry in listed if len(b"".join(map(pack, listed[: entry.sequence]))) <= cut]
    piece = gather(buffer[:cut], stream_id=STREAM, after_sequence=0)
    if not whole:
        assert piece is None
    else:
        assert piece is not None
        assert piece == pack_all(whole)
        assert piece.entries() == whole


def test_gather_stops_at_damage_and_tells_it_at_the_next_look() -> None:
    listed = entries(1, 3, Random(0), 40)
    good = pack(listed[0])
    bad = bytearray(pack(listed[1]))
    bad[-1] ^= 1
    piece = gather(good + bytes(bad) + pack(listed[2]), stream_id=STREAM, after_sequence=0)
    assert piece is not None
    assert piece.data == good
    with pytest.raises(EntryDamaged):
        gather(bytes(bad) + pack(listed[2]), stream_id=STREAM, after_sequence=1)


def test_gather_refuses_another_stream_and_numbers_that_do_not_rise() -> None:
    piece = packed(5, 2, Random(1))
    with pytest.raises(EntryDamaged, match="stream"):
        gather(piece.data, stream_id=STREAM + 1, after_sequence=0)
    with pytest.raises(EntryDamaged, match="after 5"):
        gather(piece.data, stream_id=STREAM, after_sequence=5)


@pytest.mark.parametrize("known", range(7))
def test_the_part_after_a_number(known: int) -> None:
    piece = packed(2, 4, Random(2))
    later = piece.after(known)
    expected = [entry for entry in unpack_all(piece.data) if entry.sequence > known]
    assert (later.entries() if later is not None else []) == expected
