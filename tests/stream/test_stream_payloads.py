"""Payloads: bit-exact both ways, and refused where they are not what they say."""

import json
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as npst

from daq.stream.block import GAP_UNKNOWN, Block
from daq.stream.entry import EntryDamaged
from daq.stream.payloads import (
    pack_block,
    pack_event,
    pack_raw,
    unpack_block,
    unpack_event,
    unpack_raw,
)

EVENT = {"event": "limit", "time_s": 1.5, "severity": "stop"}


@settings(deadline=None, max_examples=50)
@given(st.integers(0, 65535), st.booleans(), st.binary(max_size=200))
def test_raw_bytes_come_back(link: int, sent: bool, data: bytes) -> None:
    raw = unpack_raw(pack_raw(link, sent, data))
    assert (raw.link, raw.sent, raw.data) == (link, sent, data)


@settings(deadline=None, max_examples=50)
@given(
    npst.arrays(np.uint64, st.tuples(st.integers(0, 9), st.integers(1, 5))),
    st.integers(0, 2**62),
    st.sampled_from([GAP_UNKNOWN, 0, 17]),
    st.sampled_from("CF"),
)
def test_every_bit_of_a_block_comes_back(bits: np.ndarray, first: int, gap: int, order: str) -> None:
    """From any bit pattern: signalling NaNs, infinities and negative zeros included."""
    counts = np.array(bits.view(np.float64), order=order)
    block = Block(source=3, first_index=first, time_s=counts[:, 0].copy(), counts=counts, gap_samples=gap)
    back = unpack_block(pack_block(block))
    assert (back.source, back.first_index, back.gap_samples) == (3, first, gap)
    assert back.counts.shape == counts.shape
    assert back.counts.tobytes() == counts.tobytes()
    assert back.time_s.tobytes() == counts[:, 0].tobytes()
    assert not back.counts.flags.writeable
    assert not back.time_s.flags.writeable
    assert pack_block(back) == pack_block(block)


def test_a_block_of_the_wrong_size_is_refused() -> None:
    payload = pack_block(Block(source=0, first_index=0, time_s=np.zeros(2), counts=np.zeros((2, 3))))
    for wrong in (payload[:-8], payload + b"\0", payload[:10], b""):
        with pytest.raises(EntryDamaged):
            unpack_block(wrong)
    with pytest.raises(EntryDamaged):
        unpack_raw(b"\0\0\2")
    with pytest.raises(EntryDamaged):
        unpack_raw(b"\0\0\2\0")


JSON = st.recursive(
    st.none() | st.booleans() | st.integers(-(2**53), 2**53) | st.floats() | st.text(),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(), inner, max_size=4),
    max_leaves=12,
)


def finite(value: object) -> object:
    """Null for what JSON cannot hold, written a second time and differently."""
    if isinstance(value, float) and not math.isfinite(value):
        return None
    if isinstance(value, dict):
        return dict(zip(value, map(finite, value.values()), strict=True))
    return list(map(finite, value)) if isinstance(value, list) else value


@settings(deadline=None, max_examples=100)
@given(JSON)
def test_event_fields_come_back_with_null_for_what_json_cannot_hold(value: object) -> None:
    payload = pack_event({**EVENT, "field": value})
    assert unpack_event(payload) == {**EVENT, "field": finite(value)}
    assert json.dumps(unpack_event(payload), allow_nan=False)
    assert payload == pack_event(dict(reversed(unpack_event(payload).items()))), (
        "bytes depend on content only"
    )


def test_numpy_values_and_lone_surrogates_do_not_stop_an_event() -> None:
    event = {
        **EVENT,
        "n": np.int64(3),
        "x": np.float32("nan"),
        "row": np.array([1.0, np.inf]),
        "text": "\ud800",
    }
    assert unpack_event(pack_event(event)) == {
        **EVENT,
        "n": 3,
        "x": None,
        "row": [1.0, None],
        "text": "\ud800",
    }
    with pytest.raises(TypeError):
        pack_event({**EVENT, "what": object()})


@pytest.mark.parametrize("missing", EVENT)
def test_an_incomplete_event_is_our_own_mistake(missing: str) -> None:
    with pytest.raises(AssertionError):
        pack_event({key: value for key, value in EVENT.items() if key != missing})


@pytest.mark.parametrize("payload", [b"", b"[1]", b"{", b"\xff", b"3"])
def test_an_event_that_is_no_json_object_is_refused(payload: bytes) -> None:
    with pytest.raises(EntryDamaged):
        unpack_event(payload)
