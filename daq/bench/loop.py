"""The bench process: owns the links, the stop socket and the clock; everything that decides is in BenchCore.

It never waits for disk, network or another process. Stop first, then tell: bytes for the machine leave before the
entries go into the ring. It refuses nothing and decides nothing itself.
"""

from __future__ import annotations

import json
import select
import socket
import sys
import time
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from daq.bench import messages
from daq.bench.clocks import Clocks, reading
from daq.bench.core import BenchCore, Health, Write
from daq.bench.ports import Port
from daq.bench.schedule import hurry, quiet_collector
from daq.bench.sockets import bind, receive, reply
from daq.cards.derived import motion_link
from daq.cards.frame import FrameCard
from daq.errors import DriverError, LinkLost, MidspanError, Refused
from daq.stream.ring import Ring
from daq.watch.pipeline import Pipeline, Proven
from daq.watch.requests import Jog, OpenRun, ReturnCrosshead, StartRun
from daq.watch.values import Severity
from drivers.links import open_link
from drivers.motion import MotionPort, modem_inputs
from drivers.registry import decoder_for

TICK_NS = 10_000_000  # silence, keep-alive and status are judged at least every 10 ms
STOPPER_BEAT_NS = 20_000_000
ALIVE_NS = 500_000_000
STATION_SILENT_NS = 1_000_000_000  # a station silent for 1 s means a controlled stop
HAND_ON_S = 30e-6  # a pseudo-terminal's bytes are handed on by a kernel worker, which must not wait for all we do next
REQUEST_AGE_NS_MAX = 1_000_000_000  # the station gives up an answer after 1 s; nothing may move after that
MOVING_REQUESTS = (OpenRun, StartRun, Jog, ReturnCrosshead)
LOOK_CODE = 6  # the frame must be looked at before the next motion: the supervisor keeps its mark
LOCKED_CODE = 7  # the same, and the polarity is locked: the supervisor voids its proof
PENDING_BYTES_MAX = 4096  # commands waiting for a full output; more means the link is dead


@dataclass(frozen=True, slots=True)
class BenchConfig:
    """Everything the process is told at its start."""

    frame: dict[str, Any]
    stream_id: int
    ring_path: str
    ring_bytes: int
    stop_socket: str
    bench_socket: str
    life_fd: int
    stopper_fd: int
    deadline_s: float
    clean_start: bool
    proven: dict[str, bool]
    fifo: bool = True
    journal: str = ""  # where the recorder empties the ring; the ring names it


class BenchProcess:
    """The shell around BenchCore."""

    def __init__(self, config: BenchConfig) -> None:
        self._config = config
        self._frame = FrameCard.model_validate_json(json.dumps(config.frame))
        self._ports = [Port(open_link(link)) for link in self._frame.links]
        self._origin_ns = time.monotonic_ns()
        self._ring = Ring.create(
            config.ring_path,
            config.ring_bytes,
            config.stream_id,
            origin_ns=self._origin_ns,
            journal=config.journal,
        )
        pipeline = Pipeline(self._frame, clean_start=config.clean_start, proven=Proven(**config.proven))
        motion = MotionPort(self._frame) if self._frame.motion is not None else None
        self._stop_bytes = MotionPort(self._frame).encode_stop(0.0) if motion is not None else b""
        self._line_end = self._frame.motion.line_end.encode("latin-1") if self._frame.motion else b""
        decoders = [decoder_for(self._frame, number) for number in range(len(self._ports))]
        self._core = BenchCore(
            self._frame,
            pipeline,
            decoders,
            motion,
            origin_ns=self._origin_ns,
            at_once=self._stop_at_once,
        )
        self._stop_socket = bind(config.stop_socket)
        self._bench_socket = bind(config.bench_socket)
        self._life = socket.socket(fileno=config.life_fd)
        self._stopper = socket.socket(fileno=config.stopper_fd)
        self._life.setblocking(False)
        self._stopper.setblocking(False)
        self._stopper_alive = True
        self._station_heard_ns = 0
        self._clocks = Clocks(reading())
        self._due_ns = self._beat_ns = self._alive_ns = 0
        self._ring_lost = False
        self._done = False
        self._poll = select.poll()
        self._handlers: dict[int, Any] = {}

    def run(self) -> int:
        """Serve until the supervisor's life pipe ends. Ends in a stop, whatever ends it."""
        self._introduce()
        try:
            while not self._done:
                self._turn()
        finally:
            # only an orderly end at rest is a goodbye; after any other the stopper repeats STOP for 2 s
            resting = self._done and not self._core.pipeline.at_stake
            self._last_stop()  # whatever broke: these bytes need none of the code that did
            try:
                self._write(self._core.stop("bench process ends", time.monotonic_ns()))
                self._record()
            finally:
                self._goodbye(resting=resting)
        if self._core.pipeline.polarity_locked:
            return LOCKED_CODE
        return LOOK_CODE if self._core.pipeline.must_look else 0

    def _last_stop(self) -> None:
        number = motion_link(self._frame)
        if number is not None and not self._ports[number].lost:
            try:
                taken = self._ports[number].link.write(self._stop_bytes)
                self._core.sent(number, self._stop_bytes[:taken], time.monotonic_ns())
            except DriverError:
                pass  # the cable is out: nothing more can be done from here

    # --- start and end
    def _introduce(self) -> None:
        granted = hurry(fifo=self._config.fifo)
        self._core.note(
            "bench_started",
            time.monotonic_ns(),
            fifo=granted.fifo,
            memory_locked=granted.memory_locked,
            machine_watchdog=self._frame.motion is not None and self._frame.motion.keep_alive is not None,
        )
        self._attach()
        quiet_collector()
        self._life.send(b"ready")

    def _attach(self) -> None:
        """Watch every descriptor."""
        for number, port in enumerate(self._ports):
            self._watch(port.link.fileno(), lambda mask, n=number: self._on_link(n, mask))
            self._core.opened(number, port.link.sent_at_open, time.monotonic_ns())
        self._watch(self._stop_socket.fileno(), self._on_stop)
        self._watch(self._bench_socket.fileno(), self._on_message)
        self._watch(self._life.fileno(), self._on_life)
        self._watch(self._stopper.fileno(), self._on_stopper)
        self._hand_links_to_stopper()

    def _hand_links_to_stopper(self) -> None:
        motion = self._frame.motion
        links: list[int] = []
        stop = ""
        if motion is not None:
            number = motion_link(self._frame)
            assert number is not None
            if not self._ports[number].lost:
                links = [self._ports[number].link.fileno()]
            # a leading line end closes a half-sent command; the second STOP is whole whatever stood before
            stop = (self._line_end + 2 * self._stop_bytes).hex()
        order = json.dumps({"deadline_s": self._config.deadline_s, "stop": stop}).encode()
        try:
            socket.send_fds(self._stopper, [order], links)
        except OSError:
            self._stopper_gone()

    def _goodbye(self, *, resting: bool) -> None:
        if self._stopper_alive and resting:
            try:
                self._stopper.send(b"bye")
            except OSError:
                pass  # it has gone already; nothing moves
        for port in self._ports:
            port.link.close()
        self._ring.close()
        self._stopper.close()

    def _watch(self, descriptor: int, handler: Any) -> None:
        self._handlers[descriptor] = handler
        self._poll.register(descriptor, select.POLLIN)

    # --- one turn
    def _turn(self) -> None:
        wait_ms = -(-max(0, self._due_ns - time.monotonic_ns()) // 1_000_000)
        ready = self._poll.poll(wait_ms)
        stop_fd = self._stop_socket.fileno()
        if len(ready) > 1:
            ready.sort(key=lambda item: item[0] != stop_fd)  # a stop request passes everything
        for descriptor, mask in ready:
            handler = self._handlers.get(descriptor)
            if handler is not None:
                handler(mask)
        now_ns = time.monotonic_ns()
        if now_ns >= self._due_ns:
            self._due_ns = now_ns + TICK_NS
            self._tick(now_ns)

    def _on_link(self, number: int, mask: int) -> None:
        port = self._ports[number]
        if mask & select.POLLOUT:
            self._flush(number)
            if port.lost:
                return
        try:
            data = port.link.read()
        except LinkLost as error:
            self._lose(number, str(error))
            return
        if data is not None:
            self._write(self._core.received(number, data, time.monotonic_ns()))
            self._record()

    def _on_stop(self, mask: int) -> None:
        who, address = receive(self._stop_socket)
        now_ns = time.monotonic_ns()
        self._write(self._core.stop(who.decode("utf-8", "replace")[:80] or "stop", now_ns))
        why = self._why_no_stop()
        reply(
            self._stop_socket,
            address,
            {
                "ok": not why,
                "why": why,
                "stopped_ns": time.monotonic_ns(),
                "took_ns": time.monotonic_ns() - now_ns,
            },
        )
        self._record()

    def _why_no_stop(self) -> str:
        """Why no STOP has left; empty where its bytes are on the way."""
        number = motion_link(self._frame)
        if number is None:
            return "monitor only: midspan has no way to stop this machine"
        return "the link to the machine is lost" if self._ports[number].lost else ""

    def _on_message(self, mask: int) -> None:
        message, address = receive(self._bench_socket)
        self._station_heard_ns = now_ns = time.monotonic_ns()
        number = -1
        try:
            number, request, sent_ns = messages.decode(message)
            if request is None:
                reply(self._bench_socket, address, {"id": number, "ok": True, "snapshot": self._snapshot()})
                return
            if isinstance(request, MOVING_REQUESTS) and now_ns - sent_ns > REQUEST_AGE_NS_MAX:
                raise Refused(
                    "request", ("it is more than a second old: whoever asked has been told otherwise",)
                )
            self._write(self._core.request(request, now_ns))
            answer: dict[str, Any] = {"id": number, "ok": True}
        except Refused as error:
            answer = {"id": number, "ok": False, "missing": list(error.missing)}
        except ValueError as error:
            answer = {"id": number, "ok": False, "missing": [f"message not understood: {error}"]}
        reply(self._bench_socket, address, answer)
        self._record()

    def _on_life(self, mask: int) -> None:
        try:
            self._done = self._life.recv(64) in (b"", b"end")
        except BlockingIOError:
            pass
        except OSError:
            self._done = True

    def _on_stopper(self, mask: int) -> None:
        try:
            word = self._stopper.recv(64)
        except BlockingIOError:
            return
        except OSError:
            word = b""
        if word == b"":
            self._stopper_gone()
        else:
            self._fault("bench_late", "the stopper had to act: the bench process was late")

    def _stopper_gone(self) -> None:
        if self._stopper_alive:
            self._stopper_alive = False
            self._poll_drop(self._stopper.fileno())
            self._fault("stopper_lost", "the stopper process has gone; nothing may move until a restart")

    # --- periodic
    def _tick(self, now_ns: int) -> None:
        ring = self._ring
        silent_s = (now_ns - ring.acked_ns) * 1e-9 if ring.acked_ns else (now_ns - self._origin_ns) * 1e-9
        health = Health(stopper_alive=self._stopper_alive, recorder_silent_s=silent_s)
        self._write(self._core.tick(now_ns, health))
        if now_ns - self._beat_ns >= STOPPER_BEAT_NS and self._stopper_alive:
            self._beat_ns = now_ns
            try:
                self._stopper.send(b".")
            except OSError:
                self._stopper_gone()  # dead, or with seconds of unread beats: it does not live either way
        self._judge_neighbours(now_ns, silent_s)
        for number, port in enumerate(self._ports):
            if port.lost:
                self._reopen(number, now_ns)
            elif not port.lost and any(i.source == "modem" for i in self._frame.inputs):
                self._write(self._core.modem(modem_inputs(self._frame, number, port.link.modem()), now_ns))
        if now_ns - self._alive_ns >= ALIVE_NS:
            self._alive_ns = now_ns
            try:
                self._life.send(b".")
            except OSError:
                pass  # the supervisor's end is seen by its end of file
        self._record()

    def _judge_neighbours(self, now_ns: int, recorder_silent_s: float) -> None:
        pipeline = self._core.pipeline
        self._write(self._core.recorder_silence(recorder_silent_s, now_ns))
        if (pipeline.armed or pipeline.moving) and now_ns - self._station_heard_ns > STATION_SILENT_NS:
            self._fault("station_silent", "the station has been silent for 1 s")
        told = self._clocks.judge(reading())
        if told is not None:
            self._fault(*told)

    def _snapshot(self) -> Mapping[str, Any]:
        return {
            **self._core.pipeline.snapshot(),
            "stopper_alive": self._stopper_alive,
            "ring_lag_bytes": self._ring.lag_bytes,
            "discarded_bytes": self._core.discarded_bytes,
            "rejected_rows": sum(self._core.rejected.values()),
        }

    # --- links
    def _write(self, writes: list[Write]) -> None:
        for write in writes:
            port = self._ports[write.link]
            if port.lost:
                self._not_sent(write.link, write.data, "the link is lost")
                continue
            data = write.data
            if write.urgent and port.pending:
                self._not_sent(write.link, bytes(port.pending), "a STOP went first")
                port.pending.clear()
                data = (
                    self._line_end + data
                )  # closes the half-sent line, so that STOP stands on one of its own
            elif len(port.pending) > PENDING_BYTES_MAX:
                self._lose(write.link, "the machine takes no more commands")
                self._not_sent(write.link, data, "the link is lost")
                continue
            elif port.pending:
                port.pending += data
                continue
            try:
                taken = port.link.write(data)
            except LinkLost as error:
                self._lose(write.link, str(error))
                self._not_sent(write.link, data, "the link is lost")
                continue
            self._core.sent(write.link, data[:taken], time.monotonic_ns())
            if taken < len(data):
                port.pending += data[taken:]
                self._blocked(write, port)

    def _stop_at_once(self, write: Write) -> bool:
        """Called from inside the core: touches the link and nothing of the core. What does not leave here whole and
        easily is left to `_write`.
        """
        port = self._ports[write.link]
        if port.lost or port.pending:
            return False
        try:
            taken = port.link.write(write.data)
        except LinkLost:
            return False
        self._core.sent(write.link, write.data[:taken], time.monotonic_ns())
        if 0 < taken < len(write.data):
            port.pending += write.data[taken:]
            self._poll.modify(port.link.fileno(), select.POLLIN | select.POLLOUT)
            self._tell_stopper()
        if port.pseudo:
            time.sleep(
                HAND_ON_S
            )  # measured under full load: STOP at the other end after 240 instead of 400 us
        return taken > 0

    def _blocked(self, write: Write, port: Port) -> None:
        if write.urgent and self._tell_stopper():
            self._core.note("stop_handed_over", time.monotonic_ns(), Severity.CAUTION, link=write.link)
        self._poll.modify(port.link.fileno(), select.POLLIN | select.POLLOUT)

    def _tell_stopper(self) -> bool:
        """Have the stopper write STOP on its own descriptor. Never raises: it is part of stopping."""
        try:
            self._stopper.send(b"stop")
        except OSError:
            return False  # gone or frozen: the next beat finds out
        return True

    def _flush(self, number: int) -> None:
        port = self._ports[number]
        try:
            taken = port.link.write(bytes(port.pending))
        except LinkLost as error:
            self._lose(number, str(error))
            return
        self._core.sent(number, bytes(port.pending[:taken]), time.monotonic_ns())
        del port.pending[:taken]
        if not port.pending:
            self._sum_unsent(number)
            self._poll.modify(port.link.fileno(), select.POLLIN)

    def _lose(self, number: int, detail: str) -> None:
        port = self._ports[number]
        if port.lost:
            return
        port.lost = True
        carries_motion = number == motion_link(self._frame)
        if carries_motion:
            self._tell_stopper()  # what cannot be read may still be written to
        self._poll_drop(port.link.fileno())
        waited = port.lose(time.monotonic_ns())
        if waited:
            self._not_sent(number, waited, "the link is lost")
        if carries_motion and self._stopper_alive:
            self._hand_links_to_stopper()  # nothing: its copy would keep the port busy and the device's name taken
        self._write(self._core.lost(number, detail, time.monotonic_ns()))
        self._record()

    def _not_sent(self, number: int, data: bytes, why: str) -> None:
        """Told, not recorded as sent: the machine never got it."""
        told = self._ports[number].unsent.add(data)
        if told is not None:
            self._core.note("not_sent", time.monotonic_ns(), Severity.CAUTION, link=number, why=why, **told)

    def _sum_unsent(self, number: int) -> None:
        """Bytes leave again: what was not told one by one is told as a count."""
        told = self._ports[number].sum_unsent()
        if told is not None:
            why = "all since the first"
            self._core.note("not_sent", time.monotonic_ns(), Severity.CAUTION, link=number, why=why, **told)

    def _reopen(self, number: int, now_ns: int) -> None:
        port = self._ports[number]
        if self._core.pipeline.armed:
            port.give_up()
            return  # nothing is opened while a bar may still be loaded by a command
        if not port.open_again(now_ns):
            return  # still away; tried again in a second, the state says signal lost
        self._sum_unsent(number)
        self._watch(port.link.fileno(), lambda mask, n=number: self._on_link(n, mask))
        self._core.opened(number, port.link.sent_at_open, now_ns)
        if self._stopper_alive:
            self._hand_links_to_stopper()
        self._write(self._core.reopened(number, decoder_for(self._frame, number), now_ns))

    def _poll_drop(self, descriptor: int) -> None:
        self._handlers.pop(descriptor, None)
        self._poll.unregister(descriptor)

    def _fault(self, name: str, detail: str) -> None:
        self._write(self._core.fault(name, detail, time.monotonic_ns()))
        self._record()

    def _record(self) -> None:
        while entries := self._core.entries():
            before, self._ring_lost = self._ring_lost, not self._ring.append_batch(entries)
            if self._ring_lost:
                self._core.refused()
            if self._ring_lost and not before:
                self._fault("ring_full", "the ring is full: the recorder does not keep up")


def main(config_path: str, words: str) -> int:
    """Entry of the process: one clear line and exit code 4 where a link or the ring cannot be had."""
    with open(config_path, encoding="utf-8") as file:
        config = BenchConfig(**json.load(file), **json.loads(words))
    try:
        process = BenchProcess(config)
    except (MidspanError, OSError) as error:
        life = socket.socket(fileno=config.life_fd)
        life.send(b"failed " + str(error).encode()[:1000])
        socket.socket(fileno=config.stopper_fd).send(b"bye")  # it was given no link: there is nothing to stop
        return 4
    return process.run()


if __name__ == "__main__":
    sys.exit(main(sys.argv[2], sys.argv[3]))
