"""Rewatch: the same bench core once more over the recorded bytes: does it say and send the same again? Pure.

What the record gives: every byte that came, with the moment it was taken; what the bench remembered before the opening
(daq.bench.memory); and, as events, what people asked, which faults other processes told, what modem lines showed.
From these every decision that follows from data is repeated, and must come out the same to the last bit.

What a record does not give, and what is therefore taken as it was recorded:
- the moments of ticks that changed nothing, and so when the status word was asked for and the keep-alive sent: both
  are repeated where they stand. Moments that moved a silent run on are recorded (`ticks`) and repeated;
- what stood around a decision beyond its event: which process was slow, how full the output was, what of a command
  left before a link broke. Faults told from outside and the shell's own notes stand as facts;
- requests that were refused: they changed nothing, and left nothing.

At the first decision that comes out otherwise the comparison ends: what follows would follow from it.
"""

from __future__ import annotations

from bisect import bisect_left
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, TypeAlias

import numpy as np

from daq.bench.core import NewEntry, Write
from daq.bench.replayed import ReplayedBench
from daq.cards.frame import FrameCard
from daq.errors import Refused
from daq.recompute.decoding import Yield
from daq.recompute.source import Item, Read, Said
from daq.stream.block import Block
from daq.stream.entry import Kind
from daq.stream.payloads import unpack_event, unpack_raw
from daq.watch.requests import (
    CloseRun,
    Note,
    OpenRun,
    Prove,
    Request,
    Reset,
    StartRun,
    StopRequest,
    TightenLimit,
)
from drivers.decoded import Decoded, Decoder, PlainReads
from drivers.links import start_bytes
from drivers.motion import MotionPort
from drivers.registry import decoder_for

STOP_BY, CLOSED_BY = "stop by ", "closed by the operator: "
STOP_NOTE = ": monitor only, midspan has nothing to stop with"
ENDS = "bench process ends"
NOTES_OF_THE_SHELL = frozenset({"bench_started", "stop_handed_over", "not_sent", "ring_loss"})
FAULTS_OF_THE_CORE = frozenset({"not_answered", "unknown_reply", "too_fast", "protocol", "move_refused"})
NEAR = 4  # events within which the trouble of an output is told
WORDS_MAX = 300
UNCOMPARED = (b'{"event":"bench_memory"', b'{"after_origin_ns":')  # written for this replay itself

Deed: TypeAlias = Callable[[ReplayedBench, int], list[Write]]


@dataclass(frozen=True, slots=True)
class Rewatched:
    """decisions: events and commands that came out the same. recorded, again: the first that did not, in words, at
    at_s after the opening. why_not: why nothing could be repeated."""

    decisions: int = 0
    recorded: str = ""
    again: str = ""
    at_s: float = 0.0
    why_not: str = ""

    @property
    def same(self) -> bool:
        return not self.recorded and not self.again


class Played:
    """A decoder's place in the bench core: gives what was decoded before."""

    def __init__(self) -> None:
        self.next = Decoded()

    def feed(self, data: bytes, arrival_s: float) -> Decoded:
        return self.next


@dataclass(slots=True)
class Rewatch:
    """core: a bench that stands where that one stood, its decoders replaced by `players`."""

    core: ReplayedBench
    frame: FrameCard
    items: Sequence[Item]
    players: Sequence[Played]
    opened_ns: int
    origin_ns: int
    _said: list[Said] = field(init=False)
    _sent: list[Said] = field(init=False)
    _done: int = field(init=False, default=0)
    _query: bytes = field(init=False, default=b"")
    _alive: bytes = field(init=False, default=b"")
    _away: set[int] = field(init=False, default_factory=set)
    _ending: bool = field(init=False, default=False)
    _closed: bool = field(init=False, default=False)
    _last_ns: int = field(init=False)
    _differing: Rewatched | None = field(init=False, default=None)

    def __post_init__(self) -> None:
        told = [item for item in self.items if isinstance(item, Said)]
        self._said = [item for item in reversed(told) if item.event is not None]
        self._sent = [item for item in reversed(told) if item.event is None]
        self._last_ns = told[-1].monotonic_ns if told else 0
        if self.frame.motion is not None:
            port = MotionPort(self.frame)
            self._query, self._alive = port.query(0.0), port.keep_alive(0.0)

    def run(self, yields: Sequence[Yield]) -> Rewatched:
        """yields: what the decoders made of the items' reads."""
        found = {place: each for each in yields for place in each.places}
        told = [place for place, item in enumerate(self.items) if isinstance(item, Said)]
        told.append(len(self.items))
        place, next_told = 0, 0
        while place < len(self.items) and self._differing is None and not self._closed:
            item = self.items[place]
            if isinstance(item, Read):
                place = self._reads(place, told[next_told], found[place])
                continue
            if isinstance(item, Said):
                next_told += 1
                if self._due(item):
                    self._moment(item)
            place += 1
        if self._said and not self._closed:
            self._differs(self._said[-1], "nothing")
        return self._differing or Rewatched(self._done)

    def _reads(self, place: int, until: int, each: Yield) -> int:
        """The read at that place, together with what follows before `until` where that is all the same to the core.
        Returns the next place."""
        read = self.items[place]
        assert isinstance(read, Read)
        if isinstance(each.found, Decoded):
            self.players[read.link].next = each.found
            self._compare(self.core.received(read.link, read.data, read.monotonic_ns), read.monotonic_ns)
            return place + 1
        at = bisect_left(each.places, place)
        stop = bisect_left(each.places, until)
        part = _part(each.found, at, stop)
        moments_ns = [item.monotonic_ns for item in map(self.items.__getitem__, each.places[at:stop])]
        if stop > at + 1 and part.block.count and self._all_the_same(part, moments_ns):
            writes = self.core.received_plain(read.link, part.block, part.rows, moments_ns)
            self._compare(writes, moments_ns[-1])
            return each.places[stop - 1] + 1
        block = _part(each.found, at, at + 1).block
        self.players[read.link].next = Decoded((block,)) if block.count else Decoded()
        self._compare(self.core.received(read.link, read.data, read.monotonic_ns), read.monotonic_ns)
        return place + 1

    def _all_the_same(self, part: PlainReads, moments_ns: Sequence[int]) -> bool:
        if len(self.players) > 1:
            return False
        rows = np.array(part.rows)
        newest_s = part.block.time_s[np.cumsum(rows) - 1]
        late_s = (np.array(moments_ns) - self.origin_ns) * 1e-9 - newest_s
        return bool((late_s[rows > 0] < self.core.pipeline.plain_lag_s).all())

    # --- recorded against again

    def _compare(self, writes: Sequence[Write], now_ns: int) -> None:
        """What the bench has to say by now, and to send, against what was recorded."""
        while entries := self.core.entries():
            self._compare_said(entries, now_ns)
        for write in writes:
            self._compare_sent(write.link, write.data, now_ns)

    def _compare_said(self, entries: Sequence[NewEntry], now_ns: int) -> None:
        for kind, _, payload in entries:
            if self._closed or self._differing is not None:
                return  # the record ends here; what the same moment brought after it stands in no record
            if kind is not Kind.EVENT or payload.startswith(UNCOMPARED):
                continue
            queue = self._said
            while queue and queue[-1].event is not None and queue[-1].event["event"] in NOTES_OF_THE_SHELL:
                queue.pop()
            if not queue and now_ns >= self._last_ns:
                return  # a record that was cut off
            if not queue or queue[-1].payload != payload:
                self._differs(queue[-1] if queue else None, (kind, payload), now_ns)
                return
            told = queue.pop()
            self._closed = told.event is not None and told.event["event"] == "run_closed"
            self._done += 1

    def _compare_sent(self, link: int, data: bytes, now_ns: int) -> None:
        if self._closed or self._differing is not None or link in self._away or not data:
            return
        queue = self._sent
        left = unpack_raw(queue[-1].payload).data if queue else b""
        if left == data:
            queue.pop()
            self._done += 1
        elif self._trouble_near():  # a part of it left, or it closed a half-sent line first, or nothing did
            if left and (data.startswith(left) or left.endswith(data)):
                queue.pop()
        elif queue or now_ns < self._last_ns:
            self._differs(queue[-1] if queue else None, f"sent {data!r}", now_ns)

    def _trouble_near(self) -> bool:
        """The shell tells, about now, that an output did not take everything."""
        for item in self._said[-NEAR:]:
            assert item.event is not None
            lost = item.event["event"] == "fault" and item.event["name"] == "link_lost"
            if lost or item.event["event"] in ("not_sent", "stop_handed_over"):
                return True
        return False

    def _due(self, item: Said) -> bool:
        """Nothing so far has said this again."""
        queue = self._sent if item.event is None else self._said
        return bool(queue) and queue[-1].sequence <= item.sequence

    def _differs(
        self, recorded: Said | None, again: tuple[Kind, bytes] | str, now_ns: int | None = None
    ) -> None:
        if self._differing is not None:
            return
        before = None if recorded is None else _fields(_kind(recorded), recorded.payload)
        after = {"what": again} if isinstance(again, str) else _fields(*again)
        if recorded is not None:
            now_ns = recorded.monotonic_ns if now_ns is None else now_ns
        at_s = ((now_ns or 0) - self.opened_ns) * 1e-9
        self._differing = Rewatched(self._done, _words(before, after), _words(after, before), at_s)

    # --- what came from outside the data

    def _moment(self, item: Said) -> None:
        """Something was said or sent that no data brought about: a tick, a request, a fault."""
        if item.event is None:
            self._unasked(item)
            return
        if item.event["event"] in NOTES_OF_THE_SHELL:
            self._said.pop()
            return
        if item.event["event"] == "ticks":
            self._said.pop()
            for moment_ns in item.event["after_origin_ns"]:
                self._compare(_tick(self.core, self.origin_ns + moment_ns), self.origin_ns + moment_ns)
            return
        for deed in self._deeds(item):
            try:
                writes = deed(self.core, item.monotonic_ns)
            except Refused as error:
                self._differs(item, str(error))
                return
            self._compare(writes, item.monotonic_ns)
            if self._differing is not None or not self._due(item):
                return
        self._differs(item, "nothing")

    def _unasked(self, item: Said) -> None:
        """What the bench sends by the clock."""
        raw = unpack_raw(item.payload)
        if raw.data == self._query:
            self._compare(self.core.asked(item.monotonic_ns), item.monotonic_ns)
        elif raw.data == self._alive:
            self._compare(self.core.kept_alive(item.monotonic_ns), item.monotonic_ns)
        elif self._ending or self._trouble_near():  # the shell's own last STOP, or what was left of a command
            self._sent.pop()
        else:
            self._differs(item, "nothing")

    def _deeds(self, item: Said) -> Iterator[Deed]:
        """What can have brought it about, the likeliest first. The events of one moment are looked at together: what
        a request changes is told before the request itself."""
        for later in reversed(self._said):
            if later.monotonic_ns != item.monotonic_ns:
                break
            assert later.event is not None
            deed = self._deed_of(later.event)
            if deed is not None:
                yield deed
                return
        yield _tick
        last = self._said[-1].event if self._said else None
        if last is not None and str(last.get("reason", "")).startswith(STOP_BY):
            yield _ask(StopRequest(str(last["reason"]).removeprefix(STOP_BY)))
        elif last is not None and last["event"] == "run_closed":
            yield _ask(CloseRun(str(last["reason"])))

    def _deed_of(self, event: Mapping[str, Any]) -> Deed | None:
        name = event["event"]
        request = _request_of(event)
        if request is not None:
            self._ending = isinstance(request, StopRequest) and request.who == ENDS
            return _ask(request)
        if name == "fault" and event["name"] == "link_lost":
            return lambda core, at_ns: self._lose(event["detail"], at_ns)
        if name == "fault" and event["name"] not in FAULTS_OF_THE_CORE:
            return lambda core, at_ns: core.fault(event["name"], event["detail"], at_ns)
        if name == "input" and self._source_of(event["name"]) == "modem":
            return lambda core, at_ns: core.modem({event["name"]: event["active"]}, at_ns)
        if name == "link_open":
            number = [link.name for link in self.frame.links].index(event["link"])
            return lambda core, at_ns: self._reopen(number, at_ns)
        return None

    def _source_of(self, name: str) -> str:
        return next((status.source for status in self.frame.inputs if status.name == name), "")

    def _lose(self, detail: str, now_ns: int) -> list[Write]:
        """The event does not name the link: it is the one that is opened again next, or the only one."""
        names = [link.name for link in self.frame.links]
        events = (item.event for item in reversed(self._said) if item.event is not None)
        back = (names.index(event["link"]) for event in events if event["event"] == "link_open")
        number = next((n for n in back if n not in self._away), 0)
        self._away.add(number)
        return self.core.lost(number, detail, now_ns)

    def _reopen(self, number: int, now_ns: int) -> list[Write]:
        """The shell opens the port, then tells; on a virtual clock the other way round."""
        self._away.discard(number)
        start = start_bytes(self.frame.links[number])
        player: Decoder = self.players[number]
        opened = [Write(number, start)]
        if not self._sent or unpack_raw(self._sent[-1].payload).data == start:
            self.core.opened(number, start, now_ns)
            return opened + self.core.reopened(number, player, now_ns)
        writes = self.core.reopened(number, player, now_ns)
        self.core.opened(number, start, now_ns)
        return writes + opened


def _tick(core: ReplayedBench, now_ns: int) -> list[Write]:
    """Time passed; what is sent by the clock is repeated where it stands."""
    return core.time_passed(now_ns)


def _part(found: PlainReads, at: int, stop: int) -> PlainReads:
    """Some of the reads."""
    first = sum(found.rows[:at])
    rows = found.rows[at:stop]
    span = slice(first, first + sum(rows))
    block = found.block
    cut = Block(block.source, block.first_index + first, block.time_s[span], block.counts[span])
    return PlainReads(cut, rows)


def _ask(request: Request) -> Deed:
    return lambda core, now_ns: core.request(request, now_ns)


def _request_of(event: Mapping[str, Any]) -> Request | None:
    """The request that this event tells of."""
    name = event["event"]
    reason = str(event.get("reason", ""))
    if name == "run_opened":
        cards = event["specimen_card"], event["method"]
        return OpenRun(event["run"], *cards, event["fixture"], event["tare_override_reason"])
    if name == "started" and event["speed_mm_min"] is not None:
        return StartRun()
    if name == "limit_tightened":
        return TightenLimit(event["key"], event["value"])
    if name == "proven":
        return Prove(event["who"], event["polarity"], event["stop_drill"])
    if name == "reset":
        return Reset(event["who"], event["looked"])
    if name == "note":
        text = str(event["text"])
        if text.startswith(STOP_BY) and text.endswith(STOP_NOTE):
            return StopRequest(text.removeprefix(STOP_BY).removesuffix(STOP_NOTE))
        return Note(text)
    if name == "stop_sent" and reason.startswith(CLOSED_BY):
        return CloseRun(reason.removeprefix(CLOSED_BY)) if event["attempt"] == 1 else None
    if name == "stop_sent" and reason.startswith(STOP_BY):
        return StopRequest(reason.removeprefix(STOP_BY)) if event["attempt"] == 1 else None
    return None


def _kind(said: Said) -> Kind:
    return Kind.RAW if said.event is None else Kind.EVENT


def _fields(kind: Kind, payload: bytes) -> dict[str, Any]:
    """One entry as named values; `what` says which it is."""
    if kind is Kind.RAW:
        return {"what": f"sent {unpack_raw(payload).data!r}"}
    event = unpack_event(payload)
    return {"what": event.pop("event", "?"), **event}


def _words(fields: Mapping[str, Any] | None, other: Mapping[str, Any] | None) -> str:
    """One entry for people; beside another of its name only what is not the same."""
    if fields is None:
        return "nothing"
    alike = other is not None and other["what"] == fields["what"]
    shown = [
        f"{key}={value}"
        for key, value in fields.items()
        if key not in ("what", "severity") and not (alike and other is not None and other.get(key) == value)
    ]
    return " ".join([str(fields["what"]), *shown])[:WORDS_MAX]


def fresh_decoders(frame: FrameCard) -> list[Decoder]:
    return [decoder_for(frame, number) for number in range(len(frame.links))]
