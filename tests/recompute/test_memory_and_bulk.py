"""What recomputation rests on: a state comes back as it was kept, reads in bulk give what they give one by one."""

from __future__ import annotations

import json
import math
import random
from collections import deque
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from daq.bench.memory import NotKept, keep, restore
from daq.cards.frame import FrameCard
from daq.recompute.one import recompute
from daq.stream.clock import ClockModel
from daq.stream.payloads import pack_block
from daq.watch.values import State
from drivers.decoded import Decoded, PlainReads
from drivers.registry import decoder_for, encoder_for
from tests.recompute.made import sealed
from tests.scenarios.draw import draw
from tests.scenarios.play import Player
from tests.scenarios.world import frame_of

PLAIN = st.recursive(
    st.none()
    | st.booleans()
    | st.integers()
    | st.text()
    | st.binary()
    | st.floats()
    | st.sampled_from(State),
    lambda some: (
        st.lists(some)
        | st.tuples(some, some)
        | st.dictionaries(st.integers() | st.text(), some)
        | st.builds(lambda values: deque(values, maxlen=7), st.lists(some, max_size=7))
    ),
    max_leaves=20,
)


def same(a: object, b: object) -> bool:
    """Equal with the same types; a NaN equals a NaN, and a zero keeps its sign."""
    if isinstance(a, float) and isinstance(b, float):
        return (math.isnan(a) and math.isnan(b)) or (a == b and math.copysign(1, a) == math.copysign(1, b))
    if type(a) is not type(b):
        return False
    if isinstance(a, dict) and isinstance(b, dict):
        return list(a) == list(b) and all(same(a[key], b[key]) for key in a)
    if isinstance(a, list | tuple | deque) and isinstance(b, list | tuple | deque):
        return (
            len(a) == len(b) and all(map(same, a, b)) and getattr(a, "maxlen", 0) == getattr(b, "maxlen", 0)
        )
    return a == b


@given(PLAIN)
def test_values_come_back_through_json(value: object) -> None:
    assert same(restore(None, json.loads(json.dumps(keep(value), allow_nan=False))), value)


def test_a_clock_goes_on_from_where_it_stood() -> None:
    chance = random.Random(3)
    arrivals = [1e-3 * n + abs(chance.gauss(0, 2e-4)) for n in range(30_000)]
    old = ClockModel()
    for index, arrival_s in enumerate(arrivals[:15_000]):
        old.feed(index, 1, arrival_s, 1e-3)
    new = restore(ClockModel(), json.loads(json.dumps(keep(old))))
    for index, arrival_s in enumerate(arrivals[15_000:], 15_000):
        assert old.feed(index, 1, arrival_s, 1e-3) == new.feed(index, 1, arrival_s, 1e-3)


def test_a_state_of_elsewhere_is_refused() -> None:
    with pytest.raises(NotKept, match="is not known here"):
        keep(Path("x"))
    for foreign in ("os.system", "daq.watch.core.Nobody", "daq.nowhere.Thing", "subprocess.Popen"):
        with pytest.raises(NotKept):
            restore(None, {"of": foreign, "with": {}})
    kept = keep(ClockModel())
    del kept["with"]["_drift"]
    with pytest.raises(NotKept, match="_drift"):
        restore(ClockModel(), kept)
    kept["with"]["_drift"], kept["with"]["_other"] = 0.0, 1
    with pytest.raises(NotKept, match="_other"):
        restore(ClockModel(), kept)


# -- reads in bulk


def wire(frame: FrameCard, chance: random.Random, rows: int) -> list[bytes]:
    """Rows with replies, damage and lost rows among them, cut anywhere."""
    encoder = encoder_for(frame, 0)
    counts = np.rint(np.random.default_rng(chance.randrange(1 << 30)).normal(0, 2e4, (rows, 2)))
    out, counter = bytearray(), 0
    for row in range(rows):
        what = chance.random()
        coded = encoder.encode(counts[row : row + 1], first_counter=counter)
        counter += 1
        if what < 0.02:
            continue  # lost
        if what < 0.04:
            coded = coded[: len(coded) // 2] + b"#" + coded[len(coded) // 2 :]
        elif what < 0.06:
            coded += encoder.reply(b"ok go")
        out += coded
    pieces, at = [], 0
    while at < len(out):
        size = chance.choice((1, 7, 14, 22, 23, 50, 300))
        pieces.append(bytes(out[at : at + size]))
        at += size
    return pieces


def cut_at_reads(found: list[Decoded | PlainReads]) -> list[tuple[bytes, ...]]:
    """The blocks of each read as their bytes."""
    out: list[tuple[bytes, ...]] = []
    for each in found:
        if isinstance(each, Decoded):
            out.append(tuple(pack_block(block) for block in each.blocks))
            continue
        at = 0
        for count in each.rows:
            block = type(each.block)(
                each.block.source,
                each.block.first_index + at,
                each.block.time_s[at : at + count],
                each.block.counts[at : at + count],
            )
            out.append((pack_block(block),) if count else ())
            at += count
    return out


@pytest.mark.slow
@pytest.mark.parametrize("card", ["kiln-lane-a.toml", "kiln-lane-b.toml"])
def test_reads_in_bulk_give_what_they_give_one_by_one(card: str) -> None:
    frame = frame_of(card)
    for seed in range(30):
        chance = random.Random(seed)
        pieces = wire(frame, chance, 300)
        arrivals_s = [1.0 + 2e-3 * number + 1e-3 * chance.random() for number in range(len(pieces))]
        one, many = decoder_for(frame, 0), decoder_for(frame, 0)
        single = [one.feed(piece, arrival_s) for piece, arrival_s in zip(pieces, arrivals_s, strict=True)]
        bulk: list[Decoded | PlainReads] = list(many.feed_many(pieces, arrivals_s))  # type: ignore[attr-defined]
        assert cut_at_reads(bulk) == cut_at_reads(list(single)), seed
        assert any(isinstance(each, PlainReads) and len(each.rows) > 1 for each in bulk), seed
        assert [each.replies for each in bulk if isinstance(each, Decoded) and each.replies] == [
            each.replies for each in single if each.replies
        ]
        assert same(keep(one), keep(many)) or card == "kiln-lane-b.toml", seed


# -- whole scenarios


@pytest.mark.slow
@pytest.mark.parametrize("seed", [3, 5, 8, 11, 17])
def test_scenarios_with_misfortunes_come_out_again(tmp_path: Path, seed: int) -> None:
    """Silence, gaps, lost links, stops, glitches: every block and every decision of every run of the scenario."""
    player = Player(draw(seed))
    player.play()
    for record in sealed(tmp_path, player.bench.entries):
        found = recompute(record)
        assert (found.damage, found.differences, found.notes) == ("", (), ()), record.name
        assert found.decisions > 0
