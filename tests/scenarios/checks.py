"""What must hold after any scenario, whatever happened in it. Every check returns its complaints, one line each.

The stream's own proofs (numbering, accounting, rebuild from raw bytes) are here; what people and machine did is judged
in conduct.py. Nothing here asks the watch what it thinks: only entries, the wire's bytes and the cards are used.
"""

from __future__ import annotations

import json
import random
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np

from daq.bench.catalogue import BENCH_EVENTS
from daq.cards.frame import FrameCard
from daq.record.rows import is_event
from daq.stream.block import GAP_UNKNOWN, Block, after_loss
from daq.stream.entry import Entry, Kind, pack, unpack
from daq.stream.payloads import pack_block, unpack_block, unpack_event, unpack_raw
from daq.watch.catalogue import EVENTS
from drivers.decoded import Decoder
from drivers.registry import decoder_for
from tests.scenarios.play import Player
from tests.scenarios.wirebytes import WireRow, rows_in
from tests.scenarios.world import reduced

NS = 1e-9
READ_EVERY = 4  # a reduction costs as much as the rest of a scenario: not for every seed


def stream_checks(player: Player) -> Iterator[str]:
    """Everything that can be said of the entries alone."""
    entries, frame = player.bench.entries, player.plan.frame
    yield from whole(entries)
    yield from documented(player.bench.events)
    yield from paired(player.bench.events)
    yield from accounted(entries)
    lives = lives_of(entries, frame)
    for life in lives:
        yield from rows_once(life, frame)
    yield from gaps_told(entries, frame)
    yield from rebuilt(entries, frame)
    if player.plan.seed % READ_EVERY == 0:
        yield from readable(entries, player.plan.seed)


# --- the stream


def whole(entries: Sequence[Entry]) -> Iterator[str]:
    """Numbers without a hole, time that never goes back, and bytes that read back to the same entry."""
    place, stream = 0, b"".join(pack(entry) for entry in entries)
    last_ns = 0
    for number, entry in enumerate(entries, 1):
        again, place = unpack(stream, place)
        if again != entry:
            yield f"entry {number}: its bytes read back to something else"
        if entry.sequence != number:
            yield f"entry {number} has the number {entry.sequence}"
        if entry.monotonic_ns < last_ns:
            yield f"entry {number}: time goes back by {last_ns - entry.monotonic_ns} ns"
        last_ns = entry.monotonic_ns


def documented(events: Sequence[dict[str, object]]) -> Iterator[str]:
    known = EVENTS.keys() | BENCH_EVENTS.keys()
    for name in sorted({str(event["event"]) for event in events} - known):
        yield f"event {name} stands in no catalogue"


def paired(events: Sequence[dict[str, object]]) -> Iterator[str]:
    """Every opened run is closed once, before the next is opened."""
    opened: str | None = None
    for event in events:
        if event["event"] == "run_opened":
            if opened is not None:
                yield f"run {event['run_id']} was opened before {opened} was closed"
            opened = str(event["run_id"])
        elif event["event"] == "run_closed":
            if opened != event["run_id"]:
                yield f"run {event['run_id']} was closed while {opened} was open"
            opened = None
    if opened is not None:
        yield f"run {opened} was never closed"


def readable(entries: Sequence[Entry], seed: int) -> Iterator[str]:
    """Whichever entry was the last to be kept: the run up to there can be read and reduced."""
    chance = random.Random(seed)
    opened = [place for place, entry in enumerate(entries) if is_event(entry, "run_opened")]
    for begin, end in pairwise([*opened, len(entries)]):
        last = chance.randrange(begin, end)
        try:
            reduced(entries[begin : last + 1])
        except (ValueError, ArithmeticError, LookupError, AssertionError, TypeError) as error:
            yield f"cut after entry {last + 1}: {type(error).__name__}: {error}"


# --- received = recorded + rejected


def accounted(entries: Sequence[Entry]) -> Iterator[str]:
    """The bench's own count of each run against what stands between its opening and its count."""
    recorded: dict[int, int] = {}
    rejected: dict[int, int] = {}
    for entry in entries:
        if entry.kind is Kind.BLOCK:
            block = unpack_block(entry.payload)
            recorded[block.source] = recorded.get(block.source, 0) + block.count
        elif entry.kind is Kind.EVENT:
            event = unpack_event(entry.payload)
            if event["event"] == "run_opened":
                recorded, rejected = {}, {}
            elif event["event"] == "rejected":
                rejected[event["link"]] = rejected.get(event["link"], 0) + sum(event["rows"].values())
            elif event["event"] == "accounting":
                for link, told in enumerate(event["links"]):
                    found = (recorded.get(link, 0), rejected.get(link, 0))
                    if (told["recorded"], sum(told["rejected"].values())) != found:
                        yield f"link {link}: counted {told}, but the entries hold {found}"
                    if told["received"] != sum(found):
                        yield f"link {link}: received {told['received']} is not recorded + rejected {found}"


# --- one life of a decoder: from the opening of its port to the next


@dataclass(slots=True)
class Life:
    """What came over one link while one decoder lived."""

    link: int
    data: bytearray = field(default_factory=bytearray)
    blocks: list[Block] = field(default_factory=list)
    rejected: int = 0


def lives_of(entries: Sequence[Entry], frame: FrameCard) -> list[Life]:
    """All of them, in the order of their opening."""
    names = [link.name for link in frame.links]
    done: list[Life] = []
    now: dict[int, Life] = {}
    for entry in entries:
        if entry.kind is Kind.RAW:
            raw = unpack_raw(entry.payload)
            if not raw.sent:
                now[raw.link].data += raw.data
        elif entry.kind is Kind.BLOCK:
            block = unpack_block(entry.payload)
            now[block.source].blocks.append(block)
        else:
            event = unpack_event(entry.payload)
            if event["event"] == "link_open":
                link = names.index(event["link"])
                now[link] = Life(link)
                done.append(now[link])
            elif event["event"] == "rejected":
                now[event["link"]].rejected += sum(event["rows"].values())
    return done


def rows_once(life: Life, frame: FrameCard) -> Iterator[str]:
    """Each row of the wire stands in the blocks once, in order, or was rejected; what is missing is a listed gap."""
    where = f"link {frame.links[life.link].name}"
    wire = rows_in(frame, life.link, bytes(life.data))
    recorded = sum(block.count for block in life.blocks)
    if not recorded <= len(wire) <= recorded + life.rejected:
        yield f"{where}: {len(wire)} rows on the wire, {recorded} recorded, {life.rejected} rejected"
    at, base = 0, None
    turns = _unwrapped(wire, frame, life.link)
    next_index: int | None = None
    for block in life.blocks:
        if next_index is not None and block.first_index - next_index != max(block.gap_samples, 0):
            yield f"{where}: index {block.first_index} after {next_index} with {block.gap_samples} listed as missing"
        if block.gap_samples == GAP_UNKNOWN:
            base = None
        for offset, counts in enumerate(block.counts.tolist()):
            index = block.first_index + offset
            at = _find(wire, turns, at, tuple(counts), None if base is None else base + index)
            if at == len(wire):
                yield f"{where}: sample {index} was not on the wire, or stands twice"
                return
            if turns is not None and base is None:
                base = turns[at] - index
            at += 1
        next_index = block.first_index + block.count


def _find(
    wire: Sequence[WireRow],
    turns: Sequence[int] | None,
    at: int,
    counts: tuple[float, ...],
    counter: int | None,
) -> int:
    """The next row with these counts and, where it is known, this counter; the end where there is none."""
    while at < len(wire):
        same = wire[at].counts == counts or str(wire[at].counts) == str(counts)  # not a number equals nothing
        if same and (counter is None or turns is None or turns[at] == counter):
            return at
        at += 1
    return at


def _unwrapped(wire: Sequence[WireRow], frame: FrameCard, link: int) -> list[int] | None:
    """The device's counter without its turns."""
    lines = frame.links[link].lines
    modulus = lines.counter_modulus if lines is not None else 65_536
    counters = [row.counter for row in wire]
    if not modulus or not counters or counters[0] is None:
        return None
    steps = np.diff(np.array(counters, dtype=np.int64))
    steps = (steps + modulus // 2) % modulus - modulus // 2
    return [0, *np.cumsum(steps).tolist()]


def gaps_told(entries: Sequence[Entry], frame: FrameCard) -> Iterator[str]:
    """Each gap in the blocks is an event too."""
    names = [link.name for link in frame.links]
    missing: list[tuple[str, int | None]] = []
    told: list[tuple[str, int | None]] = []
    fresh: set[str] = set(names)
    for entry in entries:
        if entry.kind is Kind.BLOCK:
            block = unpack_block(entry.payload)
            if block.gap_samples and names[block.source] not in fresh:
                known = block.gap_samples != GAP_UNKNOWN
                missing.append((names[block.source], block.gap_samples if known else None))
            fresh.discard(names[block.source])
        elif entry.kind is Kind.EVENT:
            event = unpack_event(entry.payload)
            if event["event"] == "gap":
                told.append((event["source"], event["missing"]))
    if sorted(missing, key=str) != sorted(told, key=str):
        yield f"gaps in the blocks {missing}, told {told}"


# --- rebuild from raw bytes


def rebuilt(entries: Sequence[Entry], frame: FrameCard) -> Iterator[str]:
    """Fresh decoders, made from the cards in the stream itself, fed the recorded bytes: the same blocks bit for bit."""
    names = [link.name for link in frame.links]
    cards = [json.dumps(e["frame"]) for e in map(_event, entries) if e.get("event") == "run_opened"]
    rebuilt_frame = FrameCard.model_validate_json(cards[0]) if cards else frame
    decoders: dict[int, Decoder] = {}
    again: set[int] = (
        set()
    )  # links that have been lost: nobody knows what is missing before their first block
    made: list[bytes] = []
    kept = [entry.payload for entry in entries if entry.kind is Kind.BLOCK]
    for entry in entries:
        if entry.kind is Kind.RAW:
            raw = unpack_raw(entry.payload)
            if not raw.sent:
                decoded = decoders[raw.link].feed(raw.data, entry.monotonic_ns * NS)
                for block in decoded.blocks:
                    made.append(pack_block(after_loss(block) if raw.link in again else block))
                    again.discard(raw.link)
        elif entry.kind is Kind.EVENT:
            event = unpack_event(entry.payload)
            if event["event"] == "link_open":
                link = names.index(event["link"])
                decoders[link] = decoder_for(rebuilt_frame, link)
                if event["again"]:
                    again.add(link)
    if made != kept:
        differing = (n for n, (a, b) in enumerate(zip(made, kept, strict=False)) if a != b)
        first = next(differing, min(len(made), len(kept)))
        yield f"decoding the raw bytes again gives {len(made)} blocks for {len(kept)}; the first other is {first}"


def _event(entry: Entry) -> dict[str, object]:
    return unpack_event(entry.payload) if entry.kind is Kind.EVENT else {}
