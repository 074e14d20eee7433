"""The follower: ring entries -> what viewers are told. Pure: entries in, (kind, body, columns) out.

Keeps the open run, scales blocks with the card's calibration, runs the online reduction, and holds a thinned trace of
the run so far for late joiners. Loses nothing silently: entries missed because the ring overtook us are counted.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from daq.cards.derived import channels_of
from daq.cards.frame import FrameCard
from daq.cards.method import MethodCard
from daq.cards.series import Specimen
from daq.results.online import OnlineReduction
from daq.stream.block import Block, Floats
from daq.stream.entry import Entry, Kind
from daq.stream.payloads import unpack_block, unpack_event
from daq.stream.thin import thin_minmax

TRACE_SO_FAR_ROWS_MAX = 4_000
TURNS = frozenset({"run_opened", "tared", "seated", "fracture", "run_closed"})  # what changes the reduction
FOR_RECOMPUTATION = frozenset({"bench_memory", "ticks"})  # kilobytes that no viewer wants
SO_FAR_PIECES_MAX = 200
EVENTS_OF_RUN_MAX = 64  # for late joiners
TRACE_ROWS_PER_UPDATE_MAX = 1_000  # 20 updates/s: 20,000 rows/s leave unthinned


@dataclass(frozen=True, slots=True, eq=False)
class Tell:
    """One thing viewers are told."""

    kind: str
    body: Mapping[str, Any] = field(default_factory=dict)
    columns: Mapping[str, Floats] = field(default_factory=dict)


class Follower:
    """Feed it the entries of a ring in order."""

    def __init__(self, frame: FrameCard) -> None:
        self._frame = frame
        self._columns = [self._columns_of(number) for number in range(len(frame.links))]
        self.run: Mapping[str, Any] | None = None
        self.tared = False  # a zero has been taken since the last run was opened: net forces mean something
        self.state = "unknown - look at the frame"
        self.reason = ""
        self.faults: list[Mapping[str, Any]] = []
        self.opened: Mapping[str, Any] | None = None  # the last run's cards; its run may be over
        self.events: list[Mapping[str, Any]] = []  # of the last run, without changes of state
        self.latest_s = float("nan")
        self.sequence = -1
        self._online: OnlineReduction | None = None
        self._position_mm = float("nan")
        self._so_far: list[Floats] = []
        self.generation = 0  # of the trace so far; within one it only grows

    # --- in
    def feed(self, entries: Iterable[Entry]) -> list[Tell]:
        """Entries in stream order. Blocks between two events are reduced together: one call, not thousands."""
        tells: list[Tell] = []
        blocks: list[Block] = []
        for entry in entries:
            self.sequence = entry.sequence
            if entry.kind is Kind.BLOCK:
                self._on_block(unpack_block(entry.payload), blocks)
            elif entry.kind is Kind.EVENT:
                event = {**unpack_event(entry.payload), "sequence": entry.sequence}
                if event["event"] in FOR_RECOMPUTATION:
                    continue
                if event["event"] in TURNS:
                    self._reduce(blocks, tells)
                tells.append(self._on_event(event))
        self._reduce(blocks, tells)
        return tells

    def summary(self) -> dict[str, Any]:
        """The numbers of the open run; nothing before its tare, and nothing after its end."""
        if self._online is None or self.run is None or not self.tared:
            return {}
        return dict(self._online.summary())

    def trace_so_far(self) -> dict[str, Floats]:
        """The run so far, thinned by extremes in time order."""
        if not self._so_far or self._online is None:
            return {}
        table = np.concatenate(self._so_far)
        if (
            len(table) > TRACE_SO_FAR_ROWS_MAX
        ):  # well below, so that it is not thinned at every look from then on
            table = thin_minmax(table, 1, TRACE_SO_FAR_ROWS_MAX // 2)
            self.generation += 1
        self._so_far = [table]
        return self._named(table)

    # --- blocks
    def _columns_of(self, link: int) -> dict[str, int]:
        places: dict[str, int] = {}
        for place, channel in enumerate(channels_of(self._frame, link)):
            places.setdefault(channel.role, place)
        return places

    def _on_block(self, block: Block, blocks: list[Block]) -> None:
        if not block.count:
            return
        self.latest_s = float(block.time_s[-1])
        places = self._columns[block.source]
        if "force" in places:
            blocks.append(block)
        elif "position" in places:
            self._position_mm = float(self._values(block.source, block.counts[-1:], "position")[0])

    def _reduce(self, blocks: list[Block], tells: list[Tell]) -> None:
        """Stress, displacement and strain of the blocks so far; only the force link's blocks come here."""
        if not blocks or self._online is None:
            blocks.clear()
            return
        source = blocks[0].source
        time_s = np.concatenate([block.time_s for block in blocks])
        counts = np.concatenate([block.counts for block in blocks])
        blocks.clear()
        table = self._online.feed(time_s, self._values(source, counts, "force"), self._along(source, counts))
        if self.run is not None:
            self._so_far.append(table)
            if len(self._so_far) > SO_FAR_PIECES_MAX:
                self.trace_so_far()
        if len(table) > TRACE_ROWS_PER_UPDATE_MAX:
            table = thin_minmax(table, 1, TRACE_ROWS_PER_UPDATE_MAX)
        tells.append(Tell("trace", {"run_id": (self.run or {}).get("run_id", "")}, self._named(table)))

    def _along(self, source: int, counts: Floats) -> Floats:
        """Displacement beside each force sample: the bar's own sensor first, then the crosshead."""
        for role in ("deflection", "position"):
            if role in self._columns[source]:
                return self._values(source, counts, role)
        return np.full(len(counts), self._position_mm)

    def _values(self, source: int, counts: Floats, role: str) -> Floats:
        place = self._columns[source][role]
        channel = channels_of(self._frame, source)[place]
        values: Floats = channel.sign * (counts[:, place] * channel.scale + channel.offset)
        return values

    def _named(self, table: Floats) -> dict[str, Floats]:
        assert self._online is not None
        return {name: table[:, place] for place, name in enumerate(self._online.COLUMNS)}

    # --- events
    def _on_event(self, event: Mapping[str, Any]) -> Tell:
        name = event["event"]
        if name == "run_opened":
            self._open(event)
        elif name == "state":
            self.state, self.reason = str(event["to"]), str(event.get("reason", ""))
        elif name == "tared" and self._online is not None:
            self.tared = True
            self._online.tare(float(event["tare_n"]))
        elif name == "seated" and self._online is not None:
            self._online.seated(float(event.get("toe_offset_mm") or 0.0))
        elif name == "fracture" and self._online is not None:
            self._online.broken()
        elif name == "reset":
            self.faults = []  # a person has seen them
        if event.get("severity") in ("stop", "emergency", "caution"):
            self.faults = [*self.faults[-7:], event]
        if name not in ("state", "run_opened"):
            self.events = [*self.events[-EVENTS_OF_RUN_MAX + 1 :], event]
        if name == "run_closed":
            self.run = None
        return Tell("event", event)

    def _open(self, event: Mapping[str, Any]) -> None:
        self.run = event["run"]
        self.opened = event
        self.events = []
        self.tared = False
        self.faults = []
        self._so_far = []
        self.generation += 1
        method = MethodCard.model_validate(event["method"], strict=False)
        specimen = Specimen.model_validate(event["specimen_card"], strict=False)
        self._online = OnlineReduction(self._frame, method, specimen, str(event["fixture"]))
