"""The supervisor: starts the processes of one frame, restarts those that may be restarted, and ends them in order.

It never touches a link. A dead bench process is not restarted behind people's backs: the stopper has sent STOP, the
supervisor ends with one clear line, and the next start comes up in the state "unknown - look at the frame".
"""

from __future__ import annotations

import fcntl
import json
import os
import secrets
import select
import shutil
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from daq.bench.sizing import stream_bytes_per_s
from daq.cards.frame import FrameCard
from daq.errors import MidspanError
from daq.record.recorder import left_line, unsafe_bytes
from daq.station.marks import RunningMarks
from daq.station.places import Places
from daq.station.proofs import read_proofs, void_polarity
from daq.station.room import bytes_ahead, check_start
from daq.stream.ring import ring_bytes

DEADLINE_FIFO_S = 0.25  # measured: shorter ones trip falsely on a virtual machine
DEADLINE_PLAIN_S = 0.5
RESTARTS_MAX = 5  # in RESTART_WINDOW_S; more means a fault that a restart does not cure
RESTART_WINDOW_S = 60.0
READY_TIMEOUT_S = 20.0
END_TIMEOUT_S = {"bench": 5.0, "stopper": 5.0, "recorder": 30.0, "archivist": 60.0, "station": 5.0}
HANG_S = {"recorder": 20.0, "archivist": 120.0, "station": 10.0}  # a disc may stall for 10 s
LOCKED = ("bench", 7)  # the watch had locked the polarity
LOOK_CODES = {("bench", 6), LOCKED, ("stopper", 3)}  # all is safe, but nobody has seen the frame since
RESTARTABLE = ("recorder", "archivist", "station")

Say = Callable[[str], None]


@dataclass(slots=True)
class Child:
    """One process and our end of its life pipe."""

    role: str
    process: subprocess.Popen[bytes]
    life: socket.socket | None
    heard_s: float
    failure: str = ""


@dataclass(frozen=True, slots=True)
class Outfit:
    """What a daemon is started with."""

    frame: FrameCard
    places: Places
    fifo: bool = True
    copy_to: str | None = None
    restarts_max: int = RESTARTS_MAX
    own_machine: bool = (
        False  # begun with this daemon, as in the demonstration: no earlier end can matter to it
    )
    bench_module: str = "daq.bench.loop"  # benchmarks start the same process with instruments around it


class Supervisor:
    """Runs one frame's processes. Use as a context manager; `wait` serves until a signal or a dead bench."""

    def __init__(self, outfit: Outfit, say: Say) -> None:
        self._outfit = outfit
        self._places = outfit.places
        self._say = say
        self._stream_id = secrets.randbits(63)
        self._children: dict[str, Child] = {}
        self._restarts: list[float] = []
        self._ending = False
        self._lock: int | None = None
        self._configs: dict[str, Path] = {}
        self._untidy: list[str] = []
        self._must_look = False
        self._left = ""  # what lies in the ring only, and what to do
        self.clean_start = True

    def __enter__(self) -> Supervisor:
        self._places.make()
        check_start(self._places.data, self._outfit.frame)
        self._take_lock()
        self._start()
        return self

    def __exit__(self, *_: object) -> None:
        self.end()

    @property
    def pids(self) -> dict[str, int]:
        """Process ids by role."""
        return {role: child.process.pid for role, child in self._children.items()}

    # --- start
    def _take_lock(self) -> None:
        self._lock = os.open(self._places.lock, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o600)
        try:
            fcntl.flock(self._lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError as error:
            raise MidspanError(
                f"frame {self._places.frame} is already served by another midspan on this computer; end that one first"
            ) from error

    def _start(self) -> None:
        marks = RunningMarks(self._places)
        self.clean_start = self._outfit.own_machine or not marks.stand()
        self._sweep()
        for line in (marks.where_else(), marks.set()):
            if line:
                self._say(line)
        self._write_configs(self.clean_start)
        stopper_end, bench_end = socket.socketpair(socket.AF_UNIX, socket.SOCK_SEQPACKET)
        self._spawn_stopper(stopper_end)
        self._spawn("bench", {"stopper_fd": bench_end.fileno()}, pass_fds=(bench_end.fileno(),))
        stopper_end.close()
        bench_end.close()
        for role in RESTARTABLE:
            self._spawn(role, {})
        try:
            self._await_ready()
        except MidspanError:
            for role in RESTARTABLE:  # nothing has begun for them, and each may be killed at any time
                self._children[role].process.kill()
            self.end()
            if self.clean_start:  # nobody could have moved anything: a failed start leaves no doubt behind
                marks.clear()
            raise

    def _sweep(self) -> None:
        """Sockets of a dead daemon go, and scratch whose run stands in the journal; its ring stays until the archivist
        has drained it at its start.
        """
        for scratch in self._places.spool.glob("run-*"):
            shutil.rmtree(scratch, ignore_errors=True)
        for name in ("stop", "bench", "station", "control", "feed"):
            (self._places.runtime / name).unlink(missing_ok=True)

    def _write_configs(self, clean: bool) -> None:
        outfit, places = self._outfit, self._places
        frame = outfit.frame.model_dump(mode="json")
        ring = ring_bytes(stream_bytes_per_s(outfit.frame))
        shared: dict[str, Any] = {
            "frame": frame,
            "stream_id": self._stream_id,
            "ring_path": str(places.ring(self._stream_id)),
        }
        proven = proofs_of(places, outfit.frame)
        configs: dict[str, dict[str, Any]] = {
            "bench": {
                **shared,
                "ring_bytes": ring,
                "stop_socket": str(places.stop_socket),
                "bench_socket": str(places.bench_socket),
                "deadline_s": DEADLINE_FIFO_S if outfit.fifo and may_hurry() else DEADLINE_PLAIN_S,
                "clean_start": clean,
                "proven": proven,
                "fifo": outfit.fifo,
                "journal": str(places.journal(self._stream_id)),
            },
            "recorder": {
                **shared,
                "places": encode_places(places),
                "bytes_ahead": bytes_ahead(outfit.frame),
            },
            "archivist": {**shared, "places": encode_places(places), "copy_to": outfit.copy_to},
            "station": {**shared, "places": encode_places(places)},
        }
        for role, config in configs.items():
            path = places.runtime / f"{role}.json"
            path.write_text(json.dumps(config), encoding="utf-8")
            self._configs[role] = path

    def _spawn_stopper(self, end: socket.socket) -> None:
        command = [sys.executable, "-E", "-s", "-m", "daq.bench.stopper", str(end.fileno())]
        process = subprocess.Popen(
            command, pass_fds=(end.fileno(),), stdin=subprocess.DEVNULL, start_new_session=True
        )
        self._children["stopper"] = Child("stopper", process, None, time.monotonic())

    def _spawn(self, role: str, extra: dict[str, Any], pass_fds: tuple[int, ...] = ()) -> None:
        ours, theirs = socket.socketpair(socket.AF_UNIX, socket.SOCK_SEQPACKET)
        module = self._outfit.bench_module if role == "bench" else "daq.station.processes"
        words = json.dumps({"life_fd": theirs.fileno(), **extra})
        command = [sys.executable, "-m", module, role, str(self._configs[role]), words]
        process = subprocess.Popen(
            command,
            pass_fds=(theirs.fileno(), *pass_fds),
            stdin=subprocess.DEVNULL,
            start_new_session=True,  # Ctrl-C reaches the supervisor, which ends the others in order
            env={**os.environ, "OPENBLAS_NUM_THREADS": "1", "OMP_NUM_THREADS": "1"},
        )
        theirs.close()
        ours.setblocking(False)
        self._children[role] = Child(role, process, ours, time.monotonic())

    def _await_ready(self) -> None:
        """Raises MidspanError with the one line of whoever could not start."""
        waiting = {"bench", *RESTARTABLE}
        until_s = time.monotonic() + READY_TIMEOUT_S
        while waiting:
            for role in sorted(waiting):
                child = self._children[role]
                ended = child.process.poll() is not None
                word = self._hear(child)
                if child.failure:
                    raise MidspanError(child.failure)
                if word == b"ready":
                    waiting.discard(role)
                elif ended:
                    raise MidspanError(f"the {role} process ended while starting; its message stands above")
            if time.monotonic() > until_s:
                raise MidspanError(f"not ready after {READY_TIMEOUT_S:.0f} s: {', '.join(sorted(waiting))}")
            time.sleep(0.005)

    # --- while it runs
    def wait(self, until: Callable[[], bool] = lambda: False) -> int:
        """Serve until `until()` or a signal. Returns 0, or 5 when the bench process died."""
        while not until():
            if not self.look():
                return 5
            self._pause()
        return 0

    def _pause(self) -> None:
        lives = [child.life for child in self._children.values() if child.life is not None]
        select.select(lives, [], [], 0.1)

    def look(self) -> bool:
        """One look at every child; restarts what may be restarted. False when the bench process is dead."""
        now_s = time.monotonic()
        for role, child in list(self._children.items()):
            if child.life is not None and self._hear(child):
                child.heard_s = now_s
            code = child.process.poll()
            if code is None and role in HANG_S and now_s - child.heard_s > HANG_S[role]:
                self._say(f"{role} has been silent for {HANG_S[role]:.0f} s: killed and started again")
                child.process.kill()
                code = child.process.wait()
            if code is not None and not self._bury(child, code, now_s):
                return False
        return True

    def _bury(self, child: Child, code: int, now_s: float) -> bool:
        if child.role == "bench":
            self._say(f"bench process ended with code {code}; the stopper has sent STOP. Look at the frame.")
            return False
        if child.role == "stopper":
            self._children.pop("stopper")
            self._say(
                f"stopper process ended with code {code}; nothing may move until midspan is started again."
            )
            return True
        why = child.failure or f"code {code}"
        self._restarts = [at for at in self._restarts if now_s - at < RESTART_WINDOW_S] + [now_s]
        if len(self._restarts) > self._outfit.restarts_max:
            self._say(
                f"{child.role} keeps ending ({why}): giving up after {self._outfit.restarts_max} restarts in a minute"
            )
            return False
        self._say(f"{child.role} ended ({why}): started again")
        if child.life is not None:
            child.life.close()
        self._spawn(child.role, {})
        return True

    def _hear(self, child: Child) -> bytes:
        """The last word but dots; what the child wants told to people is said on the way."""
        assert child.life is not None
        word = b""
        try:
            while True:
                heard = child.life.recv(2048)
                if heard.startswith(b"tell "):
                    self._say(heard[5:].decode("utf-8", "replace"))
                    heard = b"."
                elif heard.startswith(b"failed "):
                    child.failure = heard[7:].decode("utf-8", "replace")
                if not heard:
                    return word
                if word == b"" or heard != b".":
                    word = heard
        except BlockingIOError:
            return word
        except OSError:
            return b""

    # --- end
    def abandon(self) -> None:
        """Close every life pipe without a word, as the death of this process would."""
        self._ending = True
        for child in self._children.values():
            if child.life is not None:
                child.life.close()
            child.process.returncode = 0  # nobody waits for them from here

    def end(self) -> None:
        """Bench first (it stops the crosshead), then recorder, archivist, station: nothing in the ring is lost."""
        if self._ending:
            return
        self._ending = True
        locked = False
        for role in ("bench", "stopper", "recorder", "archivist", "station"):
            child = self._children.get(role)
            code = self._end_child(child) if child is not None else 0
            if (role, code) in LOOK_CODES:
                self._must_look = True
                locked |= (role, code) == LOCKED
            elif child is not None and code:
                self._untidy.append(f"{role}: {child.failure or f'code {code}'}")
            if child is not None and role == "recorder":
                self._judge_ring(child)
        if locked:
            self._void_polarity()
        if not self._untidy and "bench" in self._children:
            self._places.ring(self._stream_id).unlink(missing_ok=True)
            if not self._must_look:
                RunningMarks(self._places).clear()
        self._sweep()
        if self._lock is not None:
            os.close(self._lock)

    def _void_polarity(self) -> None:
        """The wrong sign that locked the watch outlives this daemon, whether or not the station saw it."""
        try:
            void_polarity(self._places.proofs, self._stream_id, None)
        except OSError as error:
            self._say(f"{self._places.proofs}: the polarity proof could not be voided ({error.strerror})")

    def _judge_ring(self, recorder: Child) -> None:
        """However the recorder ended: a ring that holds what no journal does is the only place where that is."""
        ring = self._places.ring(self._stream_id)
        left_bytes = unsafe_bytes(ring)
        if left_bytes:
            journal = self._places.journal(self._stream_id)
            self._left = recorder.failure or left_line(ring, journal, left_bytes, "the recorder was ended")
            self._untidy.append("the ring is not empty")

    def farewell(self, took_s: float) -> str:
        """How the end went, for people."""
        if self._left:
            return f"ended in {took_s:.1f} s, but {self._left}"
        if not self._untidy:
            stopped = "crosshead stopped, " if self._outfit.frame.motion is not None else ""
            look = "; the next start asks for a look at the frame" if self._must_look else ""
            return f"ended in {took_s:.1f} s: {stopped}all that was recorded is in {self._places.data}{look}"
        return (
            f"ended in {took_s:.1f} s, not in order ({'; '.join(self._untidy)}): the next start recovers what is in"
            f" {self._places.spool} and asks for a look at the frame"
        )

    def _end_child(self, child: Child) -> int:
        """Our end of its pipe stays open until it has gone: closed with words unread, it would lose the "end"."""
        if child.life is not None:
            try:
                child.life.send(b"end")
            except OSError:
                pass  # it has ended already
        try:
            code = child.process.wait(END_TIMEOUT_S[child.role])
        except subprocess.TimeoutExpired:
            child.process.send_signal(signal.SIGKILL)
            code = child.process.wait()
        if child.life is not None:
            self._hear(child)
            child.life.close()
        return code


def encode_places(places: Places) -> dict[str, str]:
    return {"frame": places.frame, "runtime": str(places.runtime), "data": str(places.data)}


def may_hurry() -> bool:
    """Whether SCHED_FIFO is granted to us; asked in a child's stead so that no thread of ours changes class."""
    limit = os.sched_get_priority_max(os.SCHED_FIFO)
    try:
        import resource

        soft, _ = resource.getrlimit(resource.RLIMIT_RTPRIO)
    except (ImportError, OSError):
        soft = 0
    return os.geteuid() == 0 or 0 < soft <= limit


def proofs_of(places: Places, frame: FrameCard) -> dict[str, bool]:
    """Polarity and stop drill as recorded for this very card and version; a simulated frame needs none."""
    return read_proofs(places.proofs, frame)
