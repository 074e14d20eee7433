"""Which decoder a card asks for, and a link that brings too much."""

from importlib.metadata import entry_points

import numpy as np
import pytest
from wire_frames import decode, lines_frame, packets_frame

from daq.cards.load import example_path, load_frame
from daq.errors import CardError
from daq.stream.block import Block
from drivers.decoded import Decoded
from drivers.health import LinkFault, LinkHealth
from drivers.registry import DECODERS, ENCODERS, GROUP, decoder_for, encoder_for

ONE = [{"name": "force", "column": 1, "field": "f"}]


def test_the_installed_dialects_are_ours():
    installed = {entry.name: entry.load() for entry in entry_points(group=GROUP)}
    assert installed == DECODERS
    assert ENCODERS.keys() == DECODERS.keys()


def test_a_link_number_or_table_that_is_not_there_is_a_card_fault():
    frame = lines_frame({}, ONE)
    for number in (-1, 1):
        with pytest.raises(CardError, match="link number"):
            decoder_for(frame, number)
    wrong = frame.links[0].model_copy(update={"lines": None})
    with pytest.raises(CardError, match=r"\[links.lines\]"):
        decoder_for(frame.model_copy(update={"links": (wrong,)}), 0)
    packets = packets_frame({"sync": "fa", "fields": [{"name": "f", "number": "int8"}]}, ONE)
    unknown = packets.links[0].model_copy(update={"dialect": "smoke signals"})
    for made in (decoder_for, encoder_for):
        with pytest.raises(CardError, match="smoke signals"):
            made(packets.model_copy(update={"links": (unknown,)}), 0)


@pytest.mark.parametrize(
    "name", ["kiln-lane-a.toml", "kiln-lane-b.toml", "kiln-lane-c.toml", "kiln-lane-demo.toml"]
)
def test_the_shipped_frames_read_what_their_machines_send(name):
    frame = load_frame(example_path(name))
    columns = sum(channel.link == frame.links[0].name for channel in frame.channels)
    counts = np.arange(500.0 * columns).reshape(-1, columns) - 300.0
    stream = encoder_for(frame, 0).encode(counts, first_counter=65_300, inputs={"moving": True})
    result = decode(decoder_for(frame, 0), [stream[:1000], stream[1000:]])
    first = 0 if name != "kiln-lane-c.toml" else 1  # without prefix and check the first line proves nothing
    assert np.array_equal([row for _, row in result.rows], counts[first:])
    assert result.gaps == []


def rows(count: int) -> Decoded:
    block = Block(0, 0, np.arange(float(count)), np.zeros((count, 1)))
    return Decoded((block,) if count else ())


def first_fault(health: LinkHealth, per_10_ms, seconds: float) -> float | None:
    """Time of the first fault when every 10 ms bring what per_10_ms gives."""
    for step in range(int(seconds * 100)):
        if health.judge(per_10_ms, 5.0 + step * 0.01):
            return step * 0.01
    return None


def health_of(**link) -> LinkHealth:
    return LinkHealth(lines_frame({}, ONE, link=link).links[0])


def test_the_declared_rate_and_a_little_more_are_no_fault():
    assert first_fault(health_of(), rows(10), 60.0) is None
    assert first_fault(health_of(), rows(13), 60.0) is None


def test_a_flood_of_ten_times_the_rate_shows_within_100_ms():
    found_s = first_fault(health_of(), rows(100), 1.0)
    assert found_s is not None and found_s <= 0.1


def test_rows_held_back_by_a_stall_are_no_flood():
    health = health_of(silence_s=0.5)
    for step in range(100):
        assert health.judge(rows(10), step * 0.01) == ()
    assert health.judge(rows(500), 1.5) == ()
    assert health.judge(rows(10), 1.51) == ()


def test_garbage_spends_the_budget_and_a_damaged_row_now_and_then_does_not():
    noise = Decoded(discarded_bytes=100)
    assert first_fault(health_of(), noise, 2.0) == pytest.approx(0.4, abs=0.02)
    one_row = Decoded(discarded_bytes=25, rejected={"checksum": 1})
    health = health_of()
    assert all(health.judge(one_row, float(second)) == () for second in range(1000))
    health = health_of()
    health.judge(Decoded(discarded_bytes=5000), 1.0)
    assert health.judge(Decoded(), 1.1) == (LinkFault.GARBAGE,)
