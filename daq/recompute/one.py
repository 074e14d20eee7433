"""One: a sealed record, from its raw bytes through the same drivers and the same core to every reported number.

    bytes -> decoders made from the cards in the record -> blocks -> columns -> reduction -> every number of the result
    bytes -> the bench core from where it stood at the opening -> events and commands

Each is compared with what is stored. The result is reduced from the recomputed columns and the recorded events: what
the watch told is what happened, the machine was stopped by it; that it follows from the bytes is shown beside it
(rewatch.py says how far). Nothing is ever written into a record; it is opened for reading only.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from daq.bench.memory import NotKept
from daq.bench.replayed import ReplayedBench
from daq.cards.frame import FrameCard
from daq.errors import CardError, RecordDamaged
from daq.recompute.comparing import (
    Difference,
    added,
    events_compared,
    results_compared,
    rows_compared,
    traces_compared,
)
from daq.recompute.decoding import Yield, decode, recorded_rows, rows_of
from daq.recompute.rewatch import Played, Rewatch, fresh_decoders
from daq.recompute.source import Said, Source, read_source
from daq.record.read import read_trace
from daq.record.rows import RunRows, run_event
from daq.results.reduce import result_mapping
from daq.stream.block import Block
from daq.stream.rundata import ChannelData, RunData
from daq.watch.pipeline import Pipeline, Proven
from drivers.decoded import Decoder
from drivers.motion import MotionPort

OLD = "written before midspan kept what the bench remembers at the opening of a run"
AS_RECORDED = "sample times, running numbers and the watch's decisions are taken as recorded"


@dataclass(frozen=True, slots=True)
class Recomputed:
    """One record's numbers. differences: none means every stored number came out again. notes: what could not be
    repeated, and why. damage: the record cannot be read; everything else is empty then."""

    path: str
    damage: str = ""
    sha256: str = ""
    meta: Mapping[str, Any] = field(default_factory=dict)
    cards: Mapping[str, Any] = field(default_factory=dict)
    result: Mapping[str, Any] = field(default_factory=dict)
    differences: tuple[Difference, ...] = ()
    notes: tuple[str, ...] = ()
    entries: int = 0
    rows: int = 0
    decisions: int = 0

    @property
    def ok(self) -> bool:
        return not self.damage and not self.differences


def recompute(path: Path | str, relative: float = 0.0, watch: bool = True) -> Recomputed:
    """Everything again, and what differs. Never raises for a bad record: `damage` says what is wrong with it. watch:
    play the watch over the bytes, which is more than half of the work; its events stand as recorded either way."""
    try:
        return _Again(read_source(Path(path)), relative, watch).done()
    except (RecordDamaged, CardError) as error:
        return Recomputed(str(path), damage=str(error))


class _Again:
    """The work on one record."""

    def __init__(self, source: Source, relative: float, watch: bool) -> None:
        self._source = source
        self._relative = relative
        self._watch = watch
        self._frame = _frame_of(source)
        self._differences: list[Difference] = []
        self._notes: list[str] = []
        self._decisions = 0

    def done(self) -> Recomputed:
        source = self._source
        core = self._core()
        rows = RunRows(source.head)
        if core is None:
            self._decode_afresh()
            run = source.stored
        else:
            run = self._decode_on(core, rows)
        events = _events(source)
        self._differences += events_compared(source.stored.events, events)
        result = self._reduce(RunData(run.channels, tuple(events), source.head.cards))
        return Recomputed(
            path=str(source.path),
            sha256=source.sha256,
            meta={key: value for key, value in source.meta.items() if key != "result"},
            cards=source.head.cards,
            result=result,
            differences=tuple(self._differences),
            notes=tuple(self._notes),
            entries=source.entries,
            rows=sum({id(c.index): len(c.index) for c in source.stored.channels.values()}.values()),
            decisions=self._decisions,
        )

    # --- where to begin

    def _core(self) -> ReplayedBench | None:
        """A bench that stands where that one stood; None, with a note, where the record does not say."""
        source, frame, memory = self._source, self._frame, self._source.memory
        why = OLD
        if memory is not None and memory.get("memory"):
            motion = MotionPort(frame) if frame.motion is not None else None
            pipeline = Pipeline(frame, clean_start=True, proven=Proven(polarity=False, stop_drill=False))
            origin_ns = int(memory["origin_ns"])
            core = ReplayedBench(frame, pipeline, fresh_decoders(frame), motion, origin_ns=origin_ns)
            try:
                core.recall(memory["memory"])
            except NotKept as error:
                why = str(error)
            else:
                if not source.holes:
                    return core
                why = f"{source.holes} entries are missing in the stream"
        elif memory is not None:
            why = f"the bench could not write down what it remembered: {memory.get('why')}"
        self._notes.append(f"{AS_RECORDED}: {why}")
        return None

    # --- with the bench's memory: everything

    def _decode_on(self, core: ReplayedBench, rows: RunRows) -> RunData:
        source, frame = self._source, self._frame
        items = source.items[source.opened_at :]
        assert source.memory is not None
        origin_ns = int(source.memory["origin_ns"])
        players = [Played() for _ in frame.links]
        yields = decode(items, 0, frame, core.play(players), origin_ns, core.after_loss)
        self._compare_rows(yields, source.opened_at)
        for block in _blocks(yields):
            rows.feed_block(block, 0)
        if not self._watch:
            self._notes.append("decisions are taken as recorded: asked for numbers only")
            return _run_of(rows, source)
        found = Rewatch(core, frame, items, players, source.head.opened_ns, origin_ns).run(yields)
        self._decisions = found.decisions
        if not found.same:
            self._differences.append(
                Difference(f"decision {found.at_s:.3f} s after the opening", found.recorded, found.again)
            )
        return _run_of(rows, source)

    # --- without: counts alone

    def _decode_afresh(self) -> None:
        """From the lead-in on, by decoders that have seen nothing before."""
        decoders: Sequence[Decoder] = fresh_decoders(self._frame)
        yields = decode(self._source.items, 0, self._frame, decoders, self._source.head.opened_ns)
        self._compare_rows(yields, None)

    def _compare_rows(self, yields: Sequence[Yield], opened_at: int | None) -> None:
        source = self._source
        links = range(len(self._frame.links))
        stored = recorded_rows(source.blocks[0 if opened_at is None else source.lead_in :], len(links))
        lead_in = recorded_rows(source.blocks[: source.lead_in], len(links))
        for link in links:
            again = rows_of([block for each in yields if each.link == link for block in each.blocks])
            self._differences += rows_compared(
                self._frame.links[link].name,
                stored[link],
                again,
                numbers_known=opened_at is not None,
                first=len(lead_in[link].index),
            )

    # --- numbers

    def _reduce(self, run: RunData) -> Mapping[str, Any]:
        stored = dict(self._source.meta["result"])
        try:
            found = result_mapping(run)
        except (ValueError, ArithmeticError, LookupError, AssertionError, TypeError) as error:
            failure = f"{type(error).__name__}: {error}"
            if stored.get("failure") != failure:
                self._differences.append(Difference("result", str(stored)[:200], failure))
            return {"failure": failure}
        trace = found.pop("trace")
        result: dict[str, Any] = json.loads(json.dumps(found))
        for each in results_compared(stored, result, relative=self._relative):
            if each.what == "result.schema":
                continue  # said by what follows
            if each.of_words and _older(stored, result):
                self._notes.append(f"words of this version's result: {each}")
            else:
                self._differences.append(each)
        if "failure" not in stored:
            self._differences += traces_compared(read_trace(self._source.path), trace)
        new = added(stored, result)
        if new and "failure" not in stored:
            self._notes.append(f"only in the result of this version: {', '.join(new)}")
        return result


def _older(stored: Mapping[str, Any], again: Mapping[str, Any]) -> bool:
    """A result whose words had another meaning; its numbers must come out the same all the same."""
    return bool(stored.get("schema", 0) != again.get("schema"))


def _frame_of(source: Source) -> FrameCard:
    try:
        return FrameCard.model_validate(source.head.cards["frame"], strict=False)
    except ValidationError as error:
        first = error.errors()[0]
        where = ".".join(str(part) for part in first["loc"])
        raise RecordDamaged(
            f"{source.path}: its frame card cannot be read ({where}: {first['msg']})",
            first_bad="/cards/frame",
        ) from error


def _blocks(yields: Sequence[Yield]) -> Iterator[Block]:
    for each in yields:
        yield from each.blocks


def _events(source: Source) -> list[dict[str, Any]]:
    said = (item for item in source.items[source.opened_at :] if isinstance(item, Said))
    return [
        run_event(item.event, item.sequence, source.head.opened_s) for item in said if item.event is not None
    ]


def _run_of(rows: RunRows, source: Source) -> RunData:
    """The columns as the archivist makes them, channels in the order of the card."""
    channels: dict[str, ChannelData] = {}
    for taken in rows.take():
        for column, plan in enumerate(source.head.sources[taken.source].channels):
            counts, values = taken.counts[:, column].copy(), taken.values[:, column].copy()
            channels[plan.name] = ChannelData(
                plan.name, plan.role, plan.unit, taken.index, taken.time_s, counts, values
            )
    ordered = {name: channels.get(name, stored) for name, stored in source.stored.channels.items()}
    return RunData(ordered, (), source.head.cards)
