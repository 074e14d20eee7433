"""Decoding: the recorded bytes through the drivers' decoders once more, made from the cards in the record. Pure.

With the bench's memory every block must come out as recorded, bit for bit. Without it (records of before) a fresh
decoder begins in the lead-in: counts and steps of the numbering are the same, but what a running number is counted
from, and a time that is read off half a minute of arrivals, cannot be known from the record: those stay as recorded.
"""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from daq.cards.frame import FrameCard
from daq.recompute.source import Item, Read, Said
from daq.stream.block import Block, Floats, after_loss
from daq.stream.payloads import Run, unpack_runs
from drivers.decoded import Decoded, Decoder, PlainReads
from drivers.registry import decoder_for

READS_AT_ONCE = 1024
NS = 1e-9


@dataclass(frozen=True, slots=True)
class Yield:
    """What came of some reads of one link. places: of the reads in the stream, in order."""

    link: int
    places: Sequence[int]
    found: Decoded | PlainReads

    @property
    def blocks(self) -> tuple[Block, ...]:
        return (self.found.block,) if isinstance(self.found, PlainReads) else self.found.blocks


@dataclass(frozen=True, slots=True, eq=False)
class Rows:
    """Consecutive rows of one link: (n,) numbers and times, (n, k) counts; gaps: (row, samples missing before it)."""

    index: npt.NDArray[np.int64]
    time_s: Floats
    counts: Floats
    gaps: tuple[tuple[int, int], ...]


def decode(
    items: Sequence[Item],
    begin: int,
    frame: FrameCard,
    decoders: Sequence[Decoder],
    origin_ns: int,
    after: Collection[int] = (),
) -> list[Yield]:
    """Every read from `begin` on, in stream order within each link. after: links that had been lost and had given no
    block since."""
    again = set(after)
    living = dict(enumerate(decoders))
    names = [link.name for link in frame.links]
    waiting: dict[int, list[int]] = {number: [] for number in living}
    out: list[Yield] = []
    for place in range(begin, len(items)):
        item = items[place]
        if isinstance(item, Read):
            reads = waiting[item.link]
            reads.append(place)
            if len(reads) == READS_AT_ONCE:
                out += _after_loss(_feed(living[item.link], items, reads, item.link, origin_ns), again)
                reads.clear()
        elif isinstance(item, Said) and item.event is not None and item.event.get("event") == "link_open":
            link = names.index(item.event["link"])
            out += _after_loss(_feed(living[link], items, waiting[link], link, origin_ns), again)
            waiting[link].clear()
            living[link] = decoder_for(frame, link)
            if item.event.get("again"):
                again.add(link)
    for link, reads in waiting.items():
        out += _after_loss(_feed(living[link], items, reads, link, origin_ns), again)
    return out


def _after_loss(yields: Iterator[Yield], again: set[int]) -> Iterator[Yield]:
    """The first block of a link that was lost follows a gap of unknown size, as the bench core says it."""
    for each in yields:
        if each.link not in again or not each.blocks:
            yield each
            continue
        again.discard(each.link)
        first, *others = each.blocks
        if isinstance(each.found, PlainReads):
            yield replace(each, found=PlainReads(after_loss(first), each.found.rows))
        else:
            yield replace(each, found=replace(each.found, blocks=(after_loss(first), *others)))


def _feed(
    decoder: Decoder, items: Sequence[Item], places: Sequence[int], link: int, origin_ns: int
) -> Iterator[Yield]:
    if not places:
        return
    reads: list[Any] = [items[place] for place in places]
    pieces = [read.data for read in reads]
    arrivals_s = [(read.monotonic_ns - origin_ns) * NS for read in reads]
    places = list(places)
    at = 0
    many = getattr(decoder, "feed_many", None)
    if many is not None:
        for found in many(pieces, arrivals_s):
            count = len(found.rows) if isinstance(found, PlainReads) else 1
            yield Yield(link, places[at : at + count], found)
            at += count
    while at < len(pieces):
        yield Yield(link, places[at : at + 1], decoder.feed(pieces[at], arrivals_s[at]))
        at += 1


def rows_of(blocks: Sequence[Block]) -> Rows:
    """Blocks one after the other as columns; an empty sequence gives no rows of no column."""
    if not blocks:
        return Rows(np.empty(0, np.int64), np.empty(0), np.empty((0, 0)), ())
    lengths = np.array([block.count for block in blocks])
    ends = np.cumsum(lengths)
    starts = ends - lengths
    first = np.array([block.first_index for block in blocks], dtype=np.int64)
    gaps = tuple(
        (int(start), block.gap_samples)
        for start, block in zip(starts, blocks, strict=True)
        if block.gap_samples
    )
    return Rows(
        index=np.repeat(first - starts, lengths) + np.arange(ends[-1]),
        time_s=np.concatenate([block.time_s for block in blocks]),
        counts=np.concatenate([block.counts for block in blocks]),
        gaps=gaps,
    )


def recorded_rows(payloads: Sequence[bytes], links: int) -> Mapping[int, Rows]:
    """The blocks as they stand in the stream."""
    found: dict[int, list[Run]] = {link: [] for link in range(links)}
    for run in unpack_runs(payloads):
        if run.source in found:
            found[run.source].append(run)
    return {link: _rows_of_runs(runs) for link, runs in found.items()}


def _rows_of_runs(runs: Sequence[Run]) -> Rows:
    if not runs:
        return rows_of(())
    index = [(run.first_index[:, np.newaxis] + np.arange(run.rows)).reshape(-1) for run in runs]
    gaps, at = [], 0
    for run in runs:
        gaps += [(at + int(n) * run.rows, int(run.gap_samples[n])) for n in np.flatnonzero(run.gap_samples)]
        at += run.rows * len(run.first_index)
    return Rows(
        np.concatenate(index),
        np.concatenate([run.time_s for run in runs]),
        np.concatenate([run.counts for run in runs]),
        tuple(gaps),
    )
