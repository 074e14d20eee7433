"""BenchCore: the bench without its wires. Bytes and requests in; bytes to send and entries to record out.

Pure: it owns no descriptor, clock, file or socket, so that the bench process, the virtual clock and a replay run the
same lines. The shell must write what a call returns before it takes the entries: stop first, then tell; and it says
with `sent` what has left. `at_once`, where the shell gives it, writes a STOP the moment it is decided: what follows
from it (states, events, the rest of the block) takes longer than all that came before it.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any, TypeAlias

from daq.bench.account import Account, flat
from daq.bench.holding import Holding
from daq.bench.memory import NotKept, keep
from daq.cards.derived import motion_link, silence_s
from daq.cards.frame import FrameCard
from daq.errors import Refused
from daq.stream.block import after_loss
from daq.stream.entry import Kind
from daq.stream.payloads import pack_block, pack_event, pack_raw
from daq.watch.pipeline import Pipeline
from daq.watch.requests import OpenRun, Request, StopRequest
from daq.watch.values import Event, Json, Move, Severity, State, Step, Stop
from drivers.decoded import Decoded, Decoder, Peeks
from drivers.health import LinkFault, LinkHealth
from drivers.motion import (
    Acknowledged,
    CommandName,
    InputsKnown,
    MotionFact,
    MotionPort,
    NotAnswered,
    UnknownReply,
)

NewEntry: TypeAlias = tuple[Kind, int, bytes]

RING_FULL = "ring_full"  # reason for rows that were decoded and found no room in the ring
LINK_FAULTS = {LinkFault.TOO_FAST: "too_fast", LinkFault.GARBAGE: "protocol"}
TICKS_MAX = 100  # a second of silence
RECORDER_CAUTION_S = 10.0
RECORDER_STOP_S = 45.0  # the ring holds 60 s
REMEMBERED = (
    "pipeline",
    "_decoders",
    "_motion",
    "_health",
    "_link_faults",
    "_heard_s",
    "_kept_s",
    "_asked_s",
    "_recorder_word",
    "_after_loss",
)
KEPT_ALIVE = frozenset(
    {
        State.APPROACHING,
        State.IN_CONTACT,
        State.SEATING,
        State.LOADING,
        State.HOLDING,
        State.UNLOADING,
        State.RETURNING,
    }
)


@dataclass(frozen=True, slots=True)
class Write:
    """Bytes for one link. urgent: a STOP, which passes everything that waits."""

    link: int
    data: bytes
    urgent: bool = False


@dataclass(frozen=True, slots=True)
class Health:
    """What the shell sees of the processes around the bench. recorder_silent_s: age of the oldest entry that is not
    known to be safely recorded, counted from the recorder's last word where there is none.
    """

    stopper_alive: bool
    recorder_silent_s: float


class BenchCore:
    """One frame's bench. Give it everything that happens, in the order in which it happens."""

    def __init__(
        self,
        frame: FrameCard,
        pipeline: Pipeline,
        decoders: Sequence[Decoder],
        motion: MotionPort | None,
        *,
        origin_ns: int,
        at_once: Callable[[Write], bool] | None = None,
    ) -> None:
        """at_once: write these bytes now; False where they have not left and must be among the writes returned."""
        assert len(decoders) == len(frame.links)
        self._frame = frame
        self.pipeline = pipeline
        self._decoders = list(decoders)
        self._motion = motion
        self._origin_ns = origin_ns
        self._motion_link = motion_link(frame)
        self._fresh_s = min(silence_s(link) for link in frame.links)
        self._heard_s = float("-inf")
        self._kept_s = float("-inf")
        self._asked_s = float("-inf")
        self._writes: list[Write] = []
        self._entries: list[NewEntry] = []
        self._received: list[tuple[int, int, bytes]] = []
        self._decoded: list[tuple[int, int, Decoded]] = []
        self._steps: list[tuple[int, Step]] = []
        self._sent: list[tuple[int, int, bytes]] = []
        self._ticks: list[int] = []
        self._opened: set[int] = set()
        self._after_loss: set[int] = set()
        self.discarded_bytes = 0
        self.rejected: dict[str, int] = {}
        self._account = [Account() for _ in frame.links]
        self._offered: list[tuple[int, int]] = []  # link and rows of the last batch
        self._health = [LinkHealth(link) for link in frame.links]
        self._recorder_word = ""
        self._link_faults: list[tuple[LinkFault, ...]] = [() for _ in frame.links]
        self._told_by_reply = [status.name for status in frame.inputs if status.source == "reply"]
        self._at_once = at_once
        self._stop_write = stop_write(frame)
        self._stops_left = 0
        self._band: tuple[float, float, bool] | None = None
        self._holding = Holding(frame, pipeline.setup.force)
        self._peek_with(self._decoders[0])
        if at_once is not None:
            pipeline.tell_stops(self._write_stop)

    def seconds(self, now_ns: int) -> float:
        """Stream time of a monotonic instant, s."""
        return (now_ns - self._origin_ns) * 1e-9

    # --- what happens
    def received(self, link: int, data: bytes, now_ns: int) -> list[Write]:
        """Bytes arrived on a link. Returns what must be written now."""
        holding = self._holding
        stops = False
        forces_n = holding.forces_n(data) if holding.able else None
        if forces_n is not None:
            stops = max(forces_n) > self.pipeline.limit_n and self._will_stop(forces_n)
            if not stops and self._band is not None and holding.keeps(data, forces_n, now_ns, self._band):
                return []
        if holding.waits:
            data = holding.take()[0] + data
        if stops:
            self._write_stop()
        return self._feed(link, data, now_ns)

    def _will_stop(self, forces_n: list[float]) -> bool:
        """Rows just read, one at least beyond a limit: does judging them end in a Stop?"""
        beyond = self._holding.beyond
        for force_n in forces_n:
            if self.pipeline.would_stop(force_n, beyond):
                return True
            beyond = beyond + 1 if force_n > self.pipeline.limit_n else 0
        return False

    def _release(self) -> None:
        """Judge what waits, before anything else happens."""
        if self._holding.waits:
            data, then_ns = self._holding.take()
            self._writes = self._feed(0, data, then_ns)

    def _peek_with(self, decoder: Decoder) -> None:
        self._holding.decoder = decoder if isinstance(decoder, Peeks) else None

    def _feed(self, link: int, data: bytes, now_ns: int) -> list[Write]:
        now_s = self.seconds(now_ns)
        decoded = self._decoders[link].feed(data, now_s)
        if self._after_loss and link in self._after_loss and decoded.blocks:
            self._after_loss.discard(link)
            decoded = replace(decoded, blocks=(after_loss(decoded.blocks[0]), *decoded.blocks[1:]))
        self._received.append((now_ns, link, data))
        for block in decoded.blocks:
            self._heard_s = now_s
            self._obey(self.pipeline.advance(block, now_s), now_ns)
        assert self._stops_left == 0, "a STOP was written that no step contains"
        if decoded.blocks or decoded.discarded_bytes or decoded.rejected:
            self._decoded.append((now_ns, link, decoded))
        if decoded.inputs:
            latest: dict[str, bool | None] = {sample.name: sample.active for sample in decoded.inputs}
            self._obey(self.pipeline.inputs(latest, now_s), now_ns)
        for reply in decoded.replies:
            self._hear(reply, now_ns)
        self._judge_link(link, decoded, now_ns)
        return self._take_writes()

    def tick(self, now_ns: int, health: Health) -> list[Write]:
        """Time passed. Judges silence, asks for the status word, and sends the keep-alive where it is earned."""
        self._release()
        now_s = self.seconds(now_ns)
        run = self.pipeline.run
        self._obey(self.pipeline.advance(None, now_s), now_ns)
        if self.pipeline.ticked and run is not None:
            self._ticks.append(now_ns - self._origin_ns)
        if self._motion is not None:
            for fact in self._motion.expire(now_s):
                self._heed(fact, now_ns)
            self._ask(now_s, now_ns)
            self._keep_alive(now_s, now_ns, health)
        return self._take_writes()

    def request(self, request: Request, now_ns: int) -> list[Write]:
        """The operator asks. Raises Refused with the missing conditions."""
        self._release()
        memory = self._remember() if isinstance(request, OpenRun) else None
        step = self.pipeline.request(request, self.seconds(now_ns))
        if memory is not None:
            self.note("bench_memory", now_ns, Severity.REMARK, origin_ns=self._origin_ns, **memory)
        self._obey(step, now_ns)
        return self._take_writes()

    def _remember(self) -> dict[str, Any]:
        """memory: everything that came before and still counts; None where it cannot be written down, and why."""
        try:
            return {"memory": {name: keep(getattr(self, name)) for name in REMEMBERED}, "why": ""}
        except NotKept as error:
            return {"memory": None, "why": str(error)}

    def stop(self, who: str, now_ns: int) -> list[Write]:
        """A stop request: never refused."""
        return self.request(StopRequest(who), now_ns)

    def fault(self, name: str, detail: str, now_ns: int) -> list[Write]:
        """Something around the watch broke: station silent, recorder behind, ring full."""
        self._release()
        self._obey(self.pipeline.fault(name, detail, self.seconds(now_ns)), now_ns)
        return self._take_writes()

    def lost(self, link: int, detail: str, now_ns: int) -> list[Write]:
        """A link broke. Each blocks the start until it is back itself."""
        self._release()
        name = self._frame.links[link].name
        self._obey(self.pipeline.fault("link_lost", detail, self.seconds(now_ns), where=name), now_ns)
        return self._take_writes()

    def recorder_silence(self, silent_s: float, now_ns: int) -> list[Write]:
        """How far the recorder is behind: a caution, then a stop, while a run is open or something moves. Called at
        every tick; each is told once, or the telling alone would fill the ring.
        """
        word = ""
        at_stake = self.pipeline.run is not None or self.pipeline.moving
        if at_stake and silent_s > RECORDER_CAUTION_S:
            word = "recorder_lag" if silent_s > RECORDER_STOP_S else "recorder_slow"
        if word == self._recorder_word:
            return []
        self._recorder_word = word
        return self.fault(word, f"nothing recorded of the last {silent_s:.0f} s", now_ns) if word else []

    def opened(self, link: int, sent: bytes, now_ns: int) -> None:
        """A port is open; what its card sends at opening has been sent."""
        again = link in self._opened
        self._opened.add(link)
        self.note("link_open", now_ns, link=self._frame.links[link].name, again=again)
        self.sent(link, sent, now_ns)

    def sent(self, link: int, data: bytes, now_ns: int) -> None:
        """These bytes have left: the shell's word, so that the record holds nothing that the machine never got."""
        if data:
            self._release()
            self._sent.append((now_ns, link, data))

    def reopened(self, link: int, decoder: Decoder, now_ns: int) -> list[Write]:
        """A lost link is back. Nothing resumes by itself, and its first block follows a gap of unknown size."""
        self._release()
        self._decoders[link] = decoder
        self._after_loss.add(link)
        self._peek_with(self._decoders[0])
        self._health[link] = LinkHealth(self._frame.links[link])
        now_s = self.seconds(now_ns)
        if (
            self._motion is not None and link == self._motion_link
        ):  # what was said while it was away was not heard
            self._send(self._motion.encode_stop(now_s), now_ns, urgent=True)
        self._obey(self.pipeline.fault_over("link_lost", now_s, where=self._frame.links[link].name), now_ns)
        return self._take_writes()

    def modem(self, inputs: dict[str, bool | None], now_ns: int) -> list[Write]:
        """Status inputs read from modem lines."""
        self._release()
        self._obey(self.pipeline.inputs(inputs, self.seconds(now_ns)), now_ns)
        return self._take_writes()

    def note(self, name: str, now_ns: int, severity: Severity = Severity.REMARK, **fields: object) -> None:
        """An event of the shell's own: ports opened, scheduling granted, stopper acted."""
        self._release()
        event = Event(name, self.seconds(now_ns), severity, fields)  # type: ignore[arg-type]
        self._steps.append((now_ns, Step(events=(event,))))

    def entries(self) -> list[NewEntry]:
        """What happened since the last call, ready for the ring; RAW stands directly before its BLOCK. Call until
        there is nothing: the end of a run is a batch of its own, so that its account knows what became of the rows
        before it. Where the ring had no room, say so with `refused` before the next call.
        """
        out: list[NewEntry] = []
        self._offered.clear()
        if not (self._received or self._steps or self._sent or len(self._ticks) >= TICKS_MAX):
            return out
        self._book_ticks(out, self._received[0][0] if self._received else None)
        for now_ns, link, data in self._received:
            out.append((Kind.RAW, now_ns, pack_raw(link, False, data)))
        for now_ns, link, decoded in self._decoded:
            self._count(decoded, link, now_ns, out)
        self._received.clear()
        self._decoded.clear()
        self._book_ticks(out, None)
        if not self._book_steps(out):
            return out
        for now_ns, link, data in self._sent:
            out.append((Kind.RAW, now_ns, pack_raw(link, True, data)))
        self._sent.clear()
        return out

    def _book_ticks(self, out: list[NewEntry], before_ns: int | None) -> None:
        """Moments at which time alone moved the run on, where they belong among the bytes."""
        due = [at for at in self._ticks if before_ns is None or at + self._origin_ns <= before_ns]
        if due:
            told = Event("ticks", due[-1] * 1e-9, fields={"after_origin_ns": tuple(due)})
            out.append((Kind.EVENT, self._origin_ns + due[-1], pack_event(flat(told))))
            del self._ticks[: len(due)]

    def _book_steps(self, out: list[NewEntry]) -> bool:
        """The events so far; False where the end of a run has to wait for the rows of this batch."""
        for place, (now_ns, step) in enumerate(self._steps):
            for number, event in enumerate(step.events):
                if event.name == "run_closed" and self._offered:
                    self._steps[: place + 1] = [(now_ns, Step(events=step.events[number:]))]
                    return False
                self._book(event, now_ns, out)
        self._steps.clear()
        return True

    def refused(self) -> None:
        """The ring had no room for the rows of the last batch: they were received, and are not recorded."""
        for link, rows in self._offered:
            account = self._account[link]
            account.recorded -= rows
            account.reject(RING_FULL, rows)
            self.rejected[RING_FULL] = self.rejected.get(RING_FULL, 0) + rows
        self._offered.clear()

    # --- obeying
    def _obey(self, step: Step, now_ns: int) -> None:
        if step.events:
            self._steps.append((now_ns, step))
        for action in step.actions:
            if self._motion is None:
                continue
            if isinstance(action, Stop):
                self._send_stop(now_ns)
            elif isinstance(action, Move):
                self._move(action, now_ns)

    def _write_stop(self, _: Stop | None = None) -> None:
        """A Stop was decided this moment. It must not overtake what was to be written before it."""
        if self._stop_write is None or self._at_once is None or self._writes or self._stops_left:
            return
        self._stops_left += self._at_once(self._stop_write)

    def _send_stop(self, now_ns: int) -> None:
        assert self._motion is not None and self._motion_link is not None
        data = self._motion.encode_stop(self.seconds(now_ns))
        if self._stops_left:
            self._stops_left -= 1
        else:
            self._send(data, now_ns, urgent=True)

    def _move(self, move: Move, now_ns: int) -> None:
        assert self._motion is not None
        try:
            self._send(self._motion.encode_move(move, self.seconds(now_ns)), now_ns)
        except Refused as error:  # the drive cannot do it: nothing was sent, the run ends
            self._obey(self.pipeline.fault("move_refused", str(error), self.seconds(now_ns)), now_ns)
        self._kept_s = self.seconds(now_ns)

    def _send(self, data: bytes, now_ns: int, *, urgent: bool = False) -> None:
        assert self._motion_link is not None
        self._writes.append(Write(self._motion_link, data, urgent))

    def _hear(self, reply: bytes, now_ns: int) -> None:
        if self._motion is None:
            self._obey(
                self.pipeline.fault("unknown_reply", reply[:40].decode("latin-1"), self.seconds(now_ns)),
                now_ns,
            )
            return
        for fact in self._motion.reply(reply, self.seconds(now_ns)):
            self._heed(fact, now_ns)

    def _heed(self, fact: MotionFact, now_ns: int) -> None:
        now_s = self.seconds(now_ns)
        if isinstance(fact, InputsKnown):
            known: dict[str, bool | None] = {str(name): active for name, active in fact.inputs.items()}
            self._obey(self.pipeline.inputs(known, now_s), now_ns)
        elif isinstance(fact, NotAnswered):
            if fact.command is CommandName.STATUS:
                self._obey(self.pipeline.inputs(dict.fromkeys(self._told_by_reply), now_s), now_ns)
            self._obey(self.pipeline.fault("not_answered", fact.command, now_s), now_ns)
        elif isinstance(fact, UnknownReply):
            self._obey(self.pipeline.fault("unknown_reply", fact.text, now_s), now_ns)
        else:
            assert isinstance(fact, Acknowledged)

    def _judge_link(self, link: int, decoded: Decoded, now_ns: int) -> None:
        self._tell_faults(link, self._health[link].judge(decoded, self.seconds(now_ns)), now_ns)

    def _tell_faults(self, link: int, faults: tuple[LinkFault, ...], now_ns: int) -> None:
        """A flood or garbage is told once, as it begins."""
        for fault in faults:
            if fault not in self._link_faults[link]:
                detail = self._frame.links[link].name
                self._obey(self.pipeline.fault(LINK_FAULTS[fault], detail, self.seconds(now_ns)), now_ns)
        self._link_faults[link] = faults

    # --- what is sent unasked
    def _ask(self, now_s: float, now_ns: int) -> None:
        assert self._motion is not None and self._frame.motion is not None
        status = self._frame.motion.status
        if status is not None and now_s - self._asked_s >= status.every_s:
            self._asked_s = now_s
            self._send(self._motion.query(now_s), now_ns)

    def _keep_alive(self, now_s: float, now_ns: int, health: Health) -> None:
        assert self._motion is not None and self._frame.motion is not None
        keep = self._frame.motion.keep_alive
        if keep is None or self.pipeline.stopping or self.pipeline.state not in KEPT_ALIVE:
            return  # after a STOP silence is the second way to a standstill
        if now_s - self._kept_s < keep.every_s:
            return
        fresh = now_s - self._heard_s <= self._fresh_s
        if fresh and health.stopper_alive and health.recorder_silent_s <= RECORDER_STOP_S:
            self._kept_s = now_s
            self._send(self._motion.keep_alive(now_s), now_ns)

    def _take_writes(self) -> list[Write]:
        assert self._stops_left == 0, "a STOP was written that no step contains"
        self._band = self.pipeline.calm_band_n() if self._holding.able else None
        writes, self._writes = self._writes, []
        return writes

    # --- the account: received = recorded + rejected
    def _count(self, decoded: Decoded, link: int, now_ns: int, out: list[NewEntry]) -> None:
        out.extend((Kind.BLOCK, now_ns, pack_block(block)) for block in decoded.blocks)
        account = self._account[link]
        account.recorded += decoded.rows
        if decoded.rows:
            self._offered.append((link, decoded.rows))
        if decoded.discarded_bytes or decoded.rejected:
            self.discarded_bytes += decoded.discarded_bytes
            for reason, rows in decoded.rejected.items():
                self.rejected[reason] = self.rejected.get(reason, 0) + rows
                account.reject(reason, rows)
            told: dict[str, Json] = {
                "discarded_bytes": decoded.discarded_bytes,
                "link": link,
                "rows": dict(decoded.rejected),
            }
            out.append(
                (Kind.EVENT, now_ns, pack_event(flat(Event("rejected", self.seconds(now_ns), fields=told))))
            )

    def _book(self, event: Event, now_ns: int, out: list[NewEntry]) -> None:
        """Write one event; the account of a run stands directly before its end."""
        if event.name == "run_closed":
            links = tuple(account.as_json() for account in self._account)
            account = Event("accounting", event.time_s, fields={"links": links})
            out.append((Kind.EVENT, now_ns, pack_event(flat(account))))
        out.append((Kind.EVENT, now_ns, pack_event(flat(event))))
        if event.name == "run_opened":
            self._account = [Account() for _ in self._account]
            self._offered.clear()  # rows before the opening are nobody's


def stop_write(frame: FrameCard) -> Write | None:
    """The STOP of a frame, ready to be written; None where it has no motion."""
    number = motion_link(frame)
    return None if number is None else Write(number, MotionPort(frame).encode_stop(0.0), urgent=True)
