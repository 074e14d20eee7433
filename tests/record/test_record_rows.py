"""Cutting the stream into runs and decoding their entries: nothing added, nothing dropped, nothing moved."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.record.follow import LEAD_IN_ENTRIES, Ended, Follower, Opened, Within
from daq.record.head import head_of
from daq.record.rows import GapKind, RunRows
from daq.stream.entry import Entry, Kind, pack_all
from daq.stream.payloads import unpack_block, unpack_event
from tests.record.synthetic_run import FRAME, SyntheticBench, demo_entries


def columns(entries: list[Entry], cuts: set[int]) -> dict[tuple[int, str], bytes]:
    found = list(Follower().feed(pack_all(entries)))
    rows = RunRows(next(item for item in found if isinstance(item, Opened)).head)
    pieces = []
    for place, item in enumerate(item for item in found if isinstance(item, Within)):
        rows.feed(item.entry)
        if place in cuts:
            pieces += rows.take()
    pieces += rows.take()
    joined: dict[tuple[int, str], bytes] = {}
    for piece in pieces:
        for name in ("index", "time_s", "counts", "values"):
            key = (piece.source, name)
            joined[key] = joined.get(key, b"") + np.ascontiguousarray(getattr(piece, name)).tobytes()
    return joined


def fed(entries: list[Entry]) -> RunRows:
    found = list(Follower().feed(pack_all(entries)))
    rows = RunRows(next(item for item in found if isinstance(item, Opened)).head)
    for item in found:
        if isinstance(item, Within):
            rows.feed(item.entry)
    return rows


RUN = demo_entries(steps=30)
WHOLE = columns(RUN, set())


@settings(deadline=None, max_examples=25)
@given(st.sets(st.integers(0, 140)))
def test_any_cut_gives_the_same_columns(cuts: set[int]) -> None:
    assert columns(RUN, cuts) == WHOLE


def test_columns_are_the_blocks_of_the_run_one_after_the_other() -> None:
    opened = next(place for place, entry in enumerate(RUN) if b"run_opened" in entry.payload)
    closed = next(place for place, entry in enumerate(RUN) if b"run_closed" in entry.payload)
    blocks = [unpack_block(entry.payload) for entry in RUN[opened:closed] if entry.kind is Kind.BLOCK]
    opened_s = unpack_event(RUN[opened].payload)["time_s"]
    for source in (0, 1):
        own = [block for block in blocks if block.source == source]
        counts = np.concatenate([block.counts for block in own])
        time_s = np.concatenate([block.time_s for block in own]) - opened_s
        index = np.concatenate([block.first_index + np.arange(block.count) for block in own])
        assert WHOLE[source, "counts"] == counts.tobytes()
        assert WHOLE[source, "time_s"] == time_s.tobytes()
        assert WHOLE[source, "index"] == index.astype("<i8").tobytes()


def test_value_is_the_calibration_of_the_card_bit_for_bit() -> None:
    counts = np.frombuffer(WHOLE[0, "counts"]).reshape(-1, 2)
    values = np.frombuffer(WHOLE[0, "values"]).reshape(-1, 2)
    load = FRAME["channels"][0]
    for count, value in zip(counts[:, 0].tolist(), values[:, 0].tolist(), strict=True):
        assert value == load["sign"] * (count * load["scale"] + load["offset"]) or (
            count != count and value != value
        )
    assert np.isnan(values[:, 0]).sum() == 1, "the undecodable number stays visible"


def test_gaps_are_listed_with_their_place_and_never_filled() -> None:
    rows = fed(RUN)
    gaps = [gap for gap in rows.gaps if gap.kind is GapKind.SAMPLES]
    assert [(gap.source, gap.missing) for gap in gaps] == [(0, 4), (0, -1)]
    index = np.frombuffer(WHOLE[0, "index"], dtype="<i8")
    jump = int(np.flatnonzero(np.diff(index) > 1)[0])
    assert index[jump + 1] - index[jump] == 5 and gaps[0].before_index == index[jump + 1]


def test_entries_lost_on_the_way_are_a_gap_of_their_own() -> None:
    opened = next(place for place, entry in enumerate(RUN) if b"run_opened" in entry.payload)
    rows = fed(RUN[: opened + 10] + RUN[opened + 14 :])
    lost = [gap for gap in rows.gaps if gap.kind is GapKind.ENTRIES]
    assert [(gap.missing, gap.before_sequence) for gap in lost] == [(4, RUN[opened + 14].sequence)]


@pytest.mark.parametrize("piece", [1, 7, 1000])
def test_a_run_begins_with_run_opened_and_ends_with_run_closed(piece: int) -> None:
    follower = Follower()
    found = []
    for first in range(0, len(RUN), piece):
        found += follower.feed(pack_all(RUN[first : first + piece]))
    kinds = [type(item) for item in found]
    assert kinds[0] is Opened and kinds[-1] is Ended and set(kinds[1:-1]) == {Within}
    within = [item.entry for item in found if isinstance(item, Within)]
    assert all(later.sequence == earlier.sequence + 1 for earlier, later in pairwise(within))
    assert b"run_opened" in within[0].payload and b"run_closed" in within[-1].payload


def test_lead_in_is_what_stood_directly_before_and_never_the_run_before() -> None:
    bench = SyntheticBench()
    entries = [*bench.idle(40), *bench.run("A", steps=5), *bench.idle(2), *bench.run("B", steps=5)]
    opened = [item for item in Follower().feed(pack_all(entries)) if isinstance(item, Opened)]
    assert len(opened[0].lead_in) == LEAD_IN_ENTRIES
    assert opened[0].lead_in[-1][0].sequence == opened[0].head.sequence - 1
    assert len(opened[1].lead_in) == 8, "two idle steps of four entries; nothing of run A"


def test_a_run_that_was_never_closed_ends_where_the_next_begins() -> None:
    bench = SyntheticBench()
    entries = [*bench.run("A", steps=3, closed=False), *bench.run("B", steps=3)]
    ended = [item for item in Follower().feed(pack_all(entries)) if isinstance(item, Ended)]
    assert [item.closed for item in ended] == [False, True]


@settings(deadline=None, max_examples=60)
@given(
    st.dictionaries(
        st.sampled_from(
            ["run_id", "series", "specimen", "loading", "time_s", "frame", "run", "method", "utc"]
        ),
        st.recursive(
            st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=6),
            lambda inner: (
                st.lists(inner, max_size=2) | st.dictionaries(st.text(max_size=4), inner, max_size=2)
            ),
            max_leaves=5,
        ),
    )
)
def test_any_run_opened_gives_a_head_with_safe_names(fields: dict[str, object]) -> None:
    head = head_of(fields, stream_id=1, sequence=2, monotonic_ns=3)
    assert "/" not in head.stem and not head.stem.startswith(".") and len(head.stem) < 200
    assert len(head.run_id) == 36 and head.loading >= 1
    assert head.simulated, "a frame that does not say it is real never counts as real"


@pytest.mark.parametrize("frame", [{"channels": 3, "links": "x"}, {"channels": [1, {}], "links": [None]}, 7])
def test_a_frame_card_of_any_shape_gives_a_head(frame: object) -> None:
    assert head_of({"frame": frame}, stream_id=1, sequence=2, monotonic_ns=3).simulated


def test_names_that_could_leave_the_folder_are_replaced() -> None:
    head = head_of({"series": "../../etc", "specimen": "a/b"}, stream_id=1, sequence=2, monotonic_ns=3)
    assert head.series == "unnamed" and head.specimen == head.run_id[:8]


def test_a_block_that_does_not_fit_the_card_stays_out_of_the_columns() -> None:
    bench = SyntheticBench()
    opened = bench.opened("A")
    frame = {**FRAME, "channels": FRAME["channels"][:1]}
    fields = {**unpack_event(opened.payload), "frame": frame}
    rows = RunRows(head_of(fields, stream_id=1, sequence=opened.sequence, monotonic_ns=0))
    for entry in [opened, *bench.step()]:
        rows.feed(entry)
    assert rows.blocks_misfit == 2 and not rows.take()
