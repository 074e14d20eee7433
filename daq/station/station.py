"""The station process: the operator's seat, the control endpoint, the feed and the online reduction (asyncio).

It can ask the bench for things, never touch a link. If it hangs or dies the bench stops by itself after 1 s.
"""

from __future__ import annotations

import asyncio
import json
import secrets
import socket
import time
import uuid
from collections import deque
from collections.abc import Callable, Coroutine, Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import zmq
import zmq.asyncio

from daq.cards.frame import FrameCard
from daq.cards.load import LoadedSeries, check_fit, load_series
from daq.cards.questions import Question, questions
from daq.errors import CardError, MidspanError, Refused
from daq.station.aside import Aside
from daq.station.asks import open_run, plain_request, utc_now
from daq.station.benchline import SILENT_S, BenchLine
from daq.station.follower import Follower, Tell
from daq.station.found import found_records, sealed_from_report
from daq.station.locks import Locks
from daq.station.places import Places
from daq.station.processes import Life, ring_is_ready
from daq.station.proofs import KINDS, write_proof
from daq.station.room import why_too_little
from daq.station.seat import Seat
from daq.station.sitting import Sealed, Sitting, Unsealed
from daq.station.tracetext import TraceText, finite
from daq.stream.ring import RingReader
from daq.stream.updates import Update, encode
from daq.version import VERSION
from daq.watch import requests

FOLLOW_S = 0.05  # 20 updates/s for traces
BEAT_S = 0.1  # snapshot request = heartbeat; the bench stops after 1 s without
SUMMARY_EVERY = 2  # of the follow turns: 10/s
HEARTBEAT_S = 1.0  # a state update at least once a second
MOVING_COMMANDS = ("start", "jog", "return", "mount")
COMMAND_AGE_NS_MAX = (
    4_000_000_000  # a client waits 5 s for its answer; nothing may move after it has given up
)
ANSWERING_MAX = 16  # commands in work at a time
BACKLOG_ENTRIES = 256  # in one read of the ring; fewer were simply new
RECOVERY_WAIT_S = 3.0  # a client waits 5 s for its answer
ASIDE_S = 1.5  # what a healthy disk answers at once
SERIES_S = 55.0  # every record of a series is read whole; the client waits a minute
ROOM_S = 2.0
SEALED_KEPT_MAX = 1_000  # reports; a series read meanwhile may have missed them on disk
FEED_QUEUE_UPDATES_MAX = 1_000  # per viewer; ZeroMQ drops beyond, the numbers show it
REPORT_BYTES_MAX = 65_536
FAREWELL_MS = 200  # for the last update; a viewer that does not read holds nobody up
ENDED = "midspan has ended"
PUSHED_HOLDS_S = 60.0  # for the jog that shows the displacement's sign


class Station:
    """Joins ring, bench line, control and feed."""

    def __init__(self, config: Mapping[str, Any], places: Places, life: Life) -> None:
        self._config = config
        self._places = places
        self._life = life
        self._frame = FrameCard.model_validate_json(json.dumps(config["frame"]))
        self._frame_json = config["frame"]
        self._follower = Follower(self._frame)
        self._trace_text = TraceText()
        self._aside = Aside()
        self._seat = Seat()
        self._sitting: Sitting | None = None
        self._snapshot: dict[str, Any] = {}
        self._joined_sequence: int | None = (
            None  # what was recorded before we came is the archivist's to tell
        )
        self._caught_up = asyncio.Event()
        self._unsealed: Unsealed | None = None
        self._sealed: deque[Mapping[str, Any]] = deque(maxlen=SEALED_KEPT_MAX)
        self._room_word = ""
        self._answering: set[asyncio.Task[None]] = set()
        self._withdrawal: asyncio.Task[None] | None = None
        self._locks = Locks(places.proofs, self._frame, int(config["stream_id"]), life.tell)
        self._reports: dict[str, Any] = {}
        self._number = 0
        self._lost_entries = 0
        self._context = zmq.asyncio.Context()

    async def run(self) -> None:
        """Serve until the life pipe ends."""
        self._bench = BenchLine(self._places)
        self._feed = self._context.socket(zmq.PUB)
        self._feed.set(zmq.SNDHWM, FEED_QUEUE_UPDATES_MAX)
        self._feed.bind(self._places.feed_address)
        self._control = self._context.socket(zmq.ROUTER)
        self._control.bind(self._places.control_address)
        self._reports_socket = self._open_reports()
        tasks = [asyncio.create_task(body()) for body in self._bodies()]
        self._life.ready()
        try:
            done, _ = await asyncio.wait(tasks, return_when=asyncio.FIRST_COMPLETED)
            for task in done:
                task.result()
        finally:
            for task in tasks:
                task.cancel()
            await asyncio.gather(*tasks, return_exceptions=True)
            self._bench.close()
            self._context.destroy(linger=FAREWELL_MS)

    def _bodies(self) -> tuple[Callable[[], Coroutine[Any, Any, None]], ...]:
        return (self._follow, self._beat, self._serve, self._watch_room, self._end)

    async def _end(self) -> None:
        while not self._life.over():
            await asyncio.sleep(0.05)
        if self._life.orderly:
            await self._publish(Tell("state", {**self._state(), "state": ENDED}))

    # --- ring -> feed
    async def _follow(self) -> None:
        ring = Path(self._config["ring_path"])
        while not ring_is_ready(ring):
            await asyncio.sleep(0.01)
        reader = RingReader(ring)
        self._joined_sequence = reader.acked_sequence
        turn, heard_s = 0, 0.0
        while True:
            while entries := reader.read_new():
                for tell in self._follower.feed(entries):
                    self._notice(tell)
                    await self._publish(tell)
                if len(entries) < BACKLOG_ENTRIES:
                    break  # that was all: to go on would be to chase each row of a fast frame
                await asyncio.sleep(0)  # a backlog must not hold the heartbeat back
            turn += 1
            if turn % SUMMARY_EVERY == 0:
                await self._publish(Tell("summary", self._summary()))
            if time.monotonic() - heard_s > HEARTBEAT_S:
                heard_s = time.monotonic()
                await self._publish(Tell("state", self._state()))
            self._lost_entries = reader.lost_entries
            await asyncio.sleep(FOLLOW_S)

    def _notice(self, tell: Tell) -> None:
        if tell.kind == "event":
            self._locks.notice(tell.body)
        if tell.kind == "event" and tell.body["event"] == "run_closed" and self._sitting is not None:
            self._sitting.closed(
                str(tell.body["run_id"]), interrupted=bool(tell.body.get("interrupted", False))
            )

    async def _publish(self, tell: Tell) -> None:
        self._number += 1
        update = Update(
            self._number,
            tell.kind,
            self._frame.name,
            utc_now(),
            self._frame.simulated,
            tell.body,
            tell.columns,
        )
        await self._feed.send_multipart(encode(update))
        if tell.kind == "event" and tell.body["event"] in ("state", "run_opened", "run_closed"):
            await self._publish(Tell("state", self._state()))

    async def _beat(self) -> None:
        while True:
            self._bench.beat()
            silent = self._bench.silent_s > SILENT_S
            self._snapshot = {"state": "bench process does not answer"} if silent else self._bench.snapshot
            self._locks.beat(self._snapshot)
            await asyncio.sleep(BEAT_S)

    # --- what viewers see
    def _summary(self) -> dict[str, Any]:
        at_s = self._snapshot.get("time_s")
        age_s = max(0.0, at_s - self._follower.latest_s) if at_s is not None else None
        return {
            **self._snapshot,
            **({} if self._follower.tared else {"net_n": None}),
            **self._follower.summary(),  # newer than the snapshot, and of one moment
            "data_age_s": finite(age_s) if age_s is not None else None,
            "sequence": self._follower.sequence,
        }

    def _state(self) -> dict[str, Any]:
        sitting = self._sitting
        run = self._follower.run
        place = (
            sitting.place_of(run["specimen"])
            if sitting and run and run["specimen"] in sitting.loaded_numbers
            else 0
        )
        return {
            "state": self._snapshot.get("state", self._follower.state),
            "reason": self._follower.reason,
            "operator": self._seat.operator,
            "run": dict(run) if run else None,
            "bar": place,
            "bars": len(sitting.bars) if sitting else 0,
            "broken": sitting.broken_count if sitting else 0,
            "next": sitting.next_number() if sitting else None,
            "series": sitting.loaded.card.name if sitting else "",
            "faults": list(self._follower.faults),
            "lost_entries": self._lost_entries,
            "reports": self._reports,
        }

    def _look(self) -> str:
        """Everything a late joiner needs, as JSON; the trace is encoded once for all who ask."""
        trace = self._follower.trace_so_far()
        rest = {
            "version": VERSION,
            "update": self._number,  # what a viewer has heard beyond this number is newer than this look
            "frame": self._frame_json,
            "state": self._state(),
            "summary": self._summary(),
            "sitting": self._sitting.as_json() if self._sitting else None,
            "opened": self._follower.opened,
            "events": self._follower.events,
        }
        text = self._trace_text.json(self._follower.generation, trace)
        return f'{{"ok": true, "look": {json.dumps(rest)[:-1]}, "trace": {text}}}}}'

    # --- reports of recorder and archivist
    def _open_reports(self) -> socket.socket:
        self._places.station_socket.unlink(missing_ok=True)
        reports = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_NONBLOCK)
        reports.bind(str(self._places.station_socket))
        asyncio.get_running_loop().add_reader(reports.fileno(), self._hear_reports)
        return reports

    def _hear_reports(self) -> None:
        while True:
            try:
                report = json.loads(self._reports_socket.recv(REPORT_BYTES_MAX))
            except BlockingIOError:
                return
            if report.get("from") == "archivist":
                self._note_archivist(report)
            if report.get("report") == "sealed":
                asyncio.get_running_loop().create_task(self._on_sealed(report))
            else:
                self._reports[str(report.get("from"))] = report

    def _note_archivist(self, report: Mapping[str, Any]) -> None:
        """It knows which runs have ended and are no records yet, also those from before our time."""
        if report.get("report") != "status":  # what recovery says meanwhile is not yet its end
            return
        run = report.get("run")
        self._unsealed = Unsealed(**run) if run else None
        self._tell_sitting()
        if self._joined_sequence is not None and int(report["sequence"]) >= self._joined_sequence:
            self._caught_up.set()

    def _tell_sitting(self) -> None:
        if self._sitting is not None and self._unsealed is not None:
            self._sitting.unsealed(self._unsealed)

    async def _on_sealed(self, report: Mapping[str, Any]) -> None:
        self._sealed.append(report)
        if self._sitting is not None and report.get("series") == self._sitting.loaded.card.name:
            self._sitting.sealed(sealed_from_report(report))
        await self._publish(Tell("result", dict(report)))
        await self._publish(Tell("state", self._state()))

    # --- room on the disk
    async def _watch_room(self) -> None:
        """Too little room is a fault of the bench: shown to all, and it blocks the next bar."""
        while True:
            try:
                word = await self._aside.do(
                    "room", f"data folder {self._places.data}", self._why_no_room, ASIDE_S
                )
                if word and word != self._room_word:
                    await self._bench.ask(requests.TellFault("disk_low", word))
                elif self._room_word and not word:
                    await self._bench.ask(requests.FaultOver("disk_low"))
                self._room_word = word
            except MidspanError:
                pass  # bench or disk do not answer just now; asked again
            await asyncio.sleep(ROOM_S)

    def _why_no_room(self) -> str:
        run_s_max = self._sitting.loaded.method.limits.run_s_max if self._sitting else 0.0
        return why_too_little(self._places.data, self._frame, run_s_max)

    # --- control
    async def _serve(self) -> None:
        while True:
            parts = await self._control.recv_multipart()
            await asyncio.sleep(0)  # a flood of commands must not hold the heartbeat back
            if len(self._answering) >= ANSWERING_MAX:
                continue  # a flood gets no answer; the stop line does not pass here
            task = asyncio.create_task(self._respond(parts))
            self._answering.add(task)
            task.add_done_callback(self._answering.discard)

    async def _respond(self, parts: list[bytes]) -> None:
        answer = await self._answer(parts[-1])
        text = answer if isinstance(answer, str) else json.dumps(answer)
        await self._control.send_multipart([*parts[:-1], text.encode()])

    async def _answer(self, message: bytes) -> dict[str, Any] | str:
        """What goes back, as JSON already where it is long."""
        try:
            command = json.loads(message)
            if command["do"] == "look":
                return self._look()
            body = await self._do(str(command["do"]), command)
            return {"ok": True, **body}
        except Refused as error:
            return {"ok": False, "refused": error.command, "missing": list(error.missing)}
        except CardError as error:
            return {"ok": False, "refused": "series", "missing": list(error.problems)}
        except MidspanError as error:
            return {"ok": False, "refused": "", "missing": [str(error)]}
        except (ValueError, KeyError, TypeError) as error:
            return {"ok": False, "refused": "", "missing": [f"command not understood: {error!r}"]}

    async def _do(self, command: str, words: Mapping[str, Any]) -> dict[str, Any]:
        """One command. Everything but looking, sitting down and stopping needs the seat."""
        if command == "stop":
            await self._bench.ask(requests.StopRequest(str(words.get("who", "control"))))
            return {}
        if command == "sit":
            return await self._sit(words)
        self._seat.check(command, str(words.get("seat", "")))
        if (
            command in MOVING_COMMANDS
            and time.monotonic_ns() - int(words.get("at_ns", 0)) > COMMAND_AGE_NS_MAX
        ):
            raise Refused(command, ("it is too old to be obeyed; give it again",))
        if command == "rise":
            self._seat.rise(str(words["seat"]))
            return {}
        if command == "series":
            return await self._take_series(words)
        if command == "mount":
            return await self._mount(words)
        if command == "prove":
            return await self._prove(words)
        await self._bench.ask(plain_request(command, words, self._seat.operator))
        return {}

    async def _sit(self, words: Mapping[str, Any]) -> dict[str, Any]:
        """Who sits, and instead of whom, stands in the stream: a run may have begun under another name."""
        before = replace(self._seat)
        token = secrets.token_hex(16)
        self._seat.sit(str(words["operator"]), token, instead=bool(words.get("instead", False)))
        try:
            await self._bench.ask(requests.TakeSeat(self._seat.operator, before.operator))
        except Refused:
            self._seat = before
            raise
        return {"seat": token}

    async def _take_series(self, words: Mapping[str, Any]) -> dict[str, Any]:
        path = Path(str(words["path"]))
        loaded, asked, found = await self._aside.do(
            "series",
            f"card {path} or data folder {self._places.data}",
            lambda: self._read_series(path),
            SERIES_S,
        )
        self._seat.check("series", str(words.get("seat", "")))  # reading took a while
        run = self._follower.run
        if run is not None and run["series"] != loaded.card.name:
            raise Refused(
                "series",
                (f"a run of series {run['series']} is open (bar {run['specimen']}); close it first",),
            )
        grave = tuple(question.line for question in asked if question.must_correct)
        if grave:
            raise Refused("series", grave)
        if asked and not words.get("sure", False):
            return {"questions": [question.line for question in asked]}
        lately = [
            sealed_from_report(report) for report in self._sealed if report["series"] == loaded.card.name
        ]
        self._sitting = Sitting(loaded, [*found, *lately])
        if run is not None:
            self._sitting.resume(str(run["specimen"]), int(run["loading"]), str(run["run_id"]))
        self._tell_sitting()
        return {"questions": [], "sitting": self._sitting.as_json()}

    def _read_series(self, path: Path) -> tuple[LoadedSeries, Sequence[Question], list[Sealed]]:
        """Everything that touches files; runs beside the loop."""
        loaded = load_series(path)
        check_fit(self._frame, loaded.method, loaded.card.fixture, f"method of {path}")
        asked = questions(
            self._frame, loaded.method, loaded.specimens, fixture=loaded.card.fixture, series=loaded.card
        )
        return loaded, asked, found_records(self._places.data, loaded.card.name)

    async def _mount(self, words: Mapping[str, Any]) -> dict[str, Any]:
        if self._sitting is None:
            raise Refused("mount", ("no series is open; load one first",))
        try:
            await asyncio.wait_for(self._caught_up.wait(), RECOVERY_WAIT_S)
        except TimeoutError as error:
            raise Refused(
                "mount", ("an earlier run is still being sealed or recovered; try again in a moment",)
            ) from error
        sitting = self._sitting
        number = str(words.get("specimen") or sitting.next_number() or "")
        if not number:
            raise Refused("mount", (sitting.why_none(),))
        folder = f"data folder {self._places.data}"
        no_room = await self._aside.do("mount", folder, self._why_no_room, ASIDE_S)
        if no_room:
            raise Refused("mount", (no_room,))
        run_id = str(uuid.uuid4())
        loading, specimen = sitting.open(number, run_id), sitting.bar(number).specimen
        reason = str(words.get("tare_override_reason", ""))
        try:
            await self._bench.ask(
                open_run(sitting.loaded, specimen, loading, run_id, self._seat.operator, reason)
            )
        except Refused:
            sitting.refused(number)
            raise
        return {"specimen": number, "loading": loading, "run_id": run_id, "bar": sitting.place_of(number)}

    async def _prove(self, words: Mapping[str, Any]) -> dict[str, Any]:
        """A drill's word. "pushed" lifts the polarity lock for the jog that follows, for a minute; a kind of proof with
        what was found is written to the file for the served card, and the bench then holds what the file says.
        """
        kind = str(words.get("kind", ""))
        proven = self._locks.proofs()
        if kind == "pushed":
            await self._bench.ask(requests.Prove(self._seat.operator, True, proven["stop_drill"]))
            self._withdrawal = asyncio.create_task(self._withdraw())
            return {}
        if kind in KINDS:
            found = {**dict(words["found"]), "who": self._seat.operator, "utc": utc_now()}
            write_proof(self._places.proofs, self._frame, kind, found)
        await self._hold_proofs()
        return {"proven": self._locks.proofs()}

    async def _hold_proofs(self) -> None:
        """The bench takes for proven what the file says, no more."""
        proven = self._locks.proofs()
        await self._bench.ask(requests.Prove(self._seat.operator, proven["polarity"], proven["stop_drill"]))

    async def _withdraw(self) -> None:
        """However the drill ends, and if its terminal dies: nothing stays proven that is not in the file."""
        await asyncio.sleep(PUSHED_HOLDS_S)
        while True:
            try:
                await self._hold_proofs()
                return
            except Refused:
                await asyncio.sleep(1.0)  # the frame is moving; its stop or arrival comes first


def run_station(config: Mapping[str, Any], places: Places, life: Life) -> int:
    asyncio.run(Station(config, places, life).run())
    return 0
