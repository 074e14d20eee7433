"""Core: what the watch carries from step to step, and the few verbs that change it.

Every stop, every change of state and every motion command of midspan passes through here. The order in which
a block is judged stands in pipeline.py; what each state does in stages.py; what a person may ask in desk.py.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from math import isfinite

from daq.cards.method import FractureSettings
from daq.watch.catalogue import EVENTS
from daq.watch.drops import Drop
from daq.watch.expected import SECONDS_PER_MINUTE
from daq.watch.fracture import Finding, FractureWatch
from daq.watch.hum import HumWatch
from daq.watch.limits import ROWS, ForceJudge, ForceLimits, Reaction, Trip, frame_limits, run_limits
from daq.watch.motion import Flat, PositionJudge, Runaway, SpeedWatch, soft_ends, touch_n
from daq.watch.pace import Pace
from daq.watch.repeats import still_samples
from daq.watch.seating import Seating
from daq.watch.setup import Proven, RunSetup, WatchSetup
from daq.watch.states import ARMED, BROKEN, LATCHED, MOVING, WATCHED, Cause, next_state
from daq.watch.stopping import StopCheck
from daq.watch.tare import Collector, TareNote
from daq.watch.travel import Travel
from daq.watch.values import (
    NOTHING,
    Action,
    Event,
    Json,
    Move,
    MoveKind,
    Severity,
    State,
    Step,
    Stop,
    Verdict,
)

ANVIL_CLEAR_MM = 0.5
AGE_BINS, AGE_LAGS = 2.0, 3.0
RUN_TOO_LONG_ROW = 33
UNKNOWN_SAMPLES = 50
STOP_BY_HAND = "midspan cannot stop this machine: STOP IT BY ITS OWN CONTROLS"


class Aftermath:
    """What the tail of a loading has shown so far."""

    __slots__ = (
        "backed_off",
        "low_n",
        "reloaded",
        "residual_told",
        "second_told",
        "stood_s",
        "top_n",
        "unloaded_s",
        "zero_done",
    )

    def __init__(self) -> None:
        self.stood_s: float | None = None
        self.unloaded_s: float | None = None
        self.residual_told = self.zero_done = self.second_told = self.reloaded = self.backed_off = False
        self.low_n = float("inf")
        self.top_n = float("-inf")


class Run:
    """One open loading: its plan, and what has become of it so far."""

    __slots__ = (
        "aftermath",
        "back_mm_max",
        "contact_mm",
        "contact_s",
        "contact_way_mm",
        "drop",
        "ended_reason",
        "ended_s",
        "finding",
        "flat",
        "held_since_s",
        "hum",
        "no_back_off",
        "noisy_since_s",
        "note",
        "pace",
        "peak_n",
        "pieces",
        "plan",
        "seating",
        "smooth_since_s",
        "start_mm",
        "started_s",
        "tare_overridden",
        "tight",
        "told",
        "travel_mm_max",
        "verdict",
    )

    def __init__(self, plan: RunSetup) -> None:
        self.plan = plan
        self.note: TareNote | None = None
        self.smooth_since_s = float("-inf")
        self.tight: dict[str, float] = {}
        self.tare_overridden = False
        self.pace: Pace | None = None
        self.aftermath: Aftermath | None = None
        self.started_s: float | None = None
        self.start_mm: float | None = None
        self.contact_mm: float | None = None
        self.back_mm_max = float("inf")
        self.contact_s: float | None = None
        self.contact_way_mm = 0.0
        self.hum: HumWatch | None = None
        self.held_since_s: float | None = None
        self.noisy_since_s: float | None = None
        self.seating: Seating | None = None
        self.flat: Flat | None = None
        self.drop: Drop | None = None
        self.finding: Finding | None = None
        self.verdict: Verdict | None = None
        self.ended_s: float | None = None
        self.ended_reason = ""
        self.no_back_off = False  # a stop or an open shield after the end: nothing moves by itself any more
        self.peak_n = 0.0
        self.travel_mm_max = 0.0
        self.pieces: dict[str, int] = {"slip": 0, "pop_in": 0, "partial_drop": 0, "glitch": 0}
        self.told: set[str] = set()

    @property
    def ended(self) -> bool:
        return self.ended_s is not None

    def restart_tail(self, verdict: Verdict, now_s: float) -> None:
        """The bar broke while the stop was under way: what is left to look at begins now."""
        self.verdict, self.ended_s, self.aftermath = verdict, now_s, None


class Core:
    """The mutable state of one frame's watch. Public within daq.watch only."""

    def __init__(self, setup: WatchSetup, *, clean_start: bool, proven: Proven) -> None:
        self.setup = setup
        self.proven = Proven(True, True) if setup.frame.simulated else proven
        self.polarity_locked_s: float | None = None
        self.state = State.AT_REST if clean_start else State.UNKNOWN
        self.clock_s = 0.0
        self.actions: list[Action] = []
        self.at_once: Callable[[Stop], None] | None = None
        self.events: list[Event] = []
        self.sigma_n = setup.frame.cell.noise_quiet_n or 0.0
        self.limits: ForceLimits = frame_limits(setup, self.sigma_n)
        self.judge = ForceJudge(self.limits)
        self.watch = FractureWatch(setup.rate_hz, self.sigma_n, FractureSettings(), setup.lag_s)
        self.collector: Collector | None = None
        self.tare_n = 0.0
        self.last_tare_n: float | None = None
        self.gross_n = float("nan")
        position = setup.position
        rate_hz = setup.sources[position.source].rate_hz if position else 1.0
        self.travel = Travel(rate_hz, position.step if position else 0.0) if position else None
        self.bands = PositionJudge()
        self.speed_watch: SpeedWatch | None = None
        self.move_now: Move | None = None
        self.move_s = 0.0
        self.move_from_mm: float | None = None
        self.gone_mm = 0.0  # reckoned way of all moves that are over
        self.stopping: StopCheck | None = None
        self.jog_base_n = 0.0
        self.inputs: dict[str, bool | None] = {status.name: None for status in setup.frame.inputs}
        self.blocks: dict[tuple[str, str], str] = {}  # (fault, where) -> what stands against a start
        self.run: Run | None = None
        self.run_closed_s: float | None = None
        self.first_cause = ""
        self.tripped_rows: set[int] = set()
        self.blank_until_s = float("-inf")
        self.watched = False
        self.lost_at_rest = False
        self.others_lost: set[str] = set()
        self.runaway: Runaway | None = None
        self.frozen_samples: int | None = None
        # before the first zero: identical samples that are too many; None: this signal may stand still
        quiet_n, step_n = setup.frame.cell.noise_quiet_n, setup.force.step
        by_chance = still_samples(step_n, quiet_n) if quiet_n is not None and step_n > 0 else UNKNOWN_SAMPLES
        self.still_samples = max(by_chance, UNKNOWN_SAMPLES) if by_chance is not None else None
        self.lively = quiet_n is not None and step_n > 0  # known to change by itself
        self.overloaded = False
        self.cell_locked_s: float | None = None if proven.cell else 0.0
        self.check_zero_n: float | None = None

    @property
    def monitor_only(self) -> bool:
        """The card has no motion: this frame is watched and recorded, and can be neither moved nor stopped."""
        return self.setup.frame.motion is None

    # --- telling

    def emit(self, name: str, severity: Severity = Severity.REMARK, /, **fields: Json) -> None:
        assert name in EVENTS, name
        self.events.append(Event(name, self.clock_s, severity, fields))

    def take_step(self) -> Step:
        if not self.actions and not self.events:
            return NOTHING
        step = Step(tuple(self.actions), tuple(self.events))
        self.actions.clear()
        self.events.clear()
        return step

    def go(self, cause: Cause, reason: str = "") -> None:
        """Change the state by the table; a step the table does not have is a programming error."""
        after = next_state(self.state, cause)
        assert after is not None, f"{self.state} has no step for {cause}"
        if after is self.state:
            return
        self.emit("state", **{"from": self.state.value, "to": after.value, "reason": reason or cause.value})
        self.state = after
        self.watched = after in WATCHED

    # --- stopping and moving

    def stop(self, reason: str, cause: Cause | None = None) -> None:
        """Bring the crosshead to rest; cause None is a normal stop that latches nothing."""
        if self.monitor_only:  # nothing to stop with, and no standstill to wait for: only the word changes
            if cause is not None:
                self.go(cause, reason)
            return
        before = self.stopping
        attempt = 1 if before is None else before.attempt + 1
        self._say(Stop(reason, attempt))
        self.emit("stop_sent", reason=reason, attempt=attempt)
        if before is None:
            self.stopping = StopCheck(
                reason,
                self.clock_s,
                speed_mm_s=self.set_speed_mm_s,
                latency_s=self.setup.stop_latency_s,
                travel=self.travel,
                force_age_s=AGE_BINS * self.watch.level.bin_s + AGE_LAGS * self.setup.lag_s,
            )
        else:
            before.attempt = attempt
        self.gone_mm = self.way_mm
        self.move_now, self.speed_watch, self.runaway = None, None, None
        if cause is not None:
            if self.run is not None and self.run.ended:
                self.run.no_back_off = True
            self.go(cause, reason)
        self.set_bands()

    def repeat_stop(self) -> None:
        """The same stop once more: the machine has not been seen to stand."""
        check = self.stopping
        assert check is not None
        self._say(Stop(check.reason, check.attempt))
        self.emit("stop_sent", reason=check.reason, attempt=check.attempt)

    def _say(self, stop: Stop) -> None:
        """Told at once, before what follows from it is worked out, unless an earlier action has to go first."""
        if self.at_once is not None and not self.actions:
            self.at_once(stop)
        self.actions.append(stop)

    @property
    def set_speed_mm_s(self) -> float:
        """Commanded speed, positive towards the specimen; 0 where nothing is commanded."""
        return self.move_now.speed_mm_min / SECONDS_PER_MINUTE if self.move_now is not None else 0.0

    def move(self, move: Move) -> None:
        """Set the crosshead moving; never from a latched state, which desk and stages must not ask for."""
        assert self.state not in LATCHED and self.stopping is None
        if self.monitor_only:
            return
        self.actions.append(move)
        before, self.gone_mm = self.move_now, self.way_mm
        self.move_now, self.move_s = move, self.clock_s
        self.move_from_mm = self.travel.at_mm if self.travel else None
        if self.travel is not None and self.travel.at_mm is not None:
            self.travel.begin_move()
            # a machine that closes its own force loop chooses its speed itself
            if move.rate_n_s is None:
                self._watch_speed(before, move)
        self.set_bands()

    def _watch_speed(self, before: Move | None, move: Move) -> None:
        assert self.travel is not None
        if self.speed_watch is not None and before is not None and before.kind is move.kind is MoveKind.LOAD:
            self.speed_watch.retune(
                self.set_speed_mm_s, self.clock_s
            )  # a force loop must not restart the look
            return
        latency_s = self.setup.stop_latency_s
        self.speed_watch = SpeedWatch(self.set_speed_mm_s, self.clock_s, latency_s, self.travel)

    @property
    def way_mm(self) -> float:
        """Way of all moves as reckoned from the set speeds; counts on through corrections of the speed."""
        return self.gone_mm + self.reckoned_mm()

    def moved_mm(self) -> float:
        """Way since the move was commanded: measured where there is a position, else reckoned."""
        if self.travel is not None and self.travel.at_mm is not None and self.move_from_mm is not None:
            return self.travel.at_mm - self.move_from_mm
        return self.reckoned_mm()

    def reckoned_mm(self) -> float:
        return self.set_speed_mm_s * (self.clock_s - self.move_s)

    def set_bands(self) -> None:
        """Position limits that belong to the state and the move of the moment."""
        motion, run = self.setup.frame.motion, self.run
        if motion is None:
            return
        rows: list[tuple[int, float, float]] = []
        if self.move_now is not None:
            rows.append(soft_ends(motion, self.set_speed_mm_s, self.setup.towards))
        infinite = float("inf")
        if self.state is State.APPROACHING and run is not None and run.start_mm is not None:
            rows.append((9, -infinite, run.start_mm + motion.gap_mm + 1.0))
        if run is not None and run.contact_mm is not None:
            if self.watched or self.state is State.IN_CONTACT:
                rows.append((11, -infinite, run.contact_mm + run.travel_mm_max))
            rows.append((12, -infinite, run.contact_mm + motion.anvil_gap_mm - ANVIL_CLEAR_MM))
        self.bands.take(tuple(rows))

    # --- limits

    def use_limits(self, limits: ForceLimits) -> None:
        self.limits = limits
        self.judge.take(limits)

    def limits_for_run(self) -> None:
        """Derive anew, at rest only; what a person has tightened stays tightened."""
        run = self.run
        if run is None:
            self.use_limits(frame_limits(self.setup, self.sigma_n))
            return
        limits = run_limits(self.setup, run.plan, self.sigma_n)
        tight_n = run.tight.get("force_n_max")
        if tight_n is not None and tight_n < limits.ceiling_n:
            limits = limits.tightened(tight_n)
        self.use_limits(limits)

    def trip(self, trip: Trip) -> None:
        """Obey a limit: stop first, then say which. Each row once until the reset."""
        if trip.row in self.tripped_rows:
            return
        self.tripped_rows.add(trip.row)
        what = trip.what or ROWS[trip.row].what
        if self.monitor_only and trip.reaction is not Reaction.SIGNAL_LOST and trip.row != RUN_TOO_LONG_ROW:
            # midspan cannot stop this machine: the person is told, and the recording goes on to the end
            self.tell_limit(trip, what, Severity.STOP)
            self._heed_overload(trip)
            return
        severity = Severity.CAUTION
        if trip.reaction is not Reaction.CAUTION:
            severity = Severity.STOP
            self.stop(what, _CAUSES[trip.reaction])
        self.tell_limit(trip, what, severity)
        if trip.row == 5:
            self.polarity_locked_s = self.clock_s
            self.emit("polarity_locked", Severity.STOP)
        self._heed_overload(trip)
        if severity is Severity.STOP:
            lost = trip.reaction is Reaction.SIGNAL_LOST
            self.end_run(Verdict.SIGNAL_LOST if lost else Verdict.STOPPED, what)

    def _heed_overload(self, trip: Trip) -> None:
        """No bar and no way towards one until cellcheck.py has seen zero and weight."""
        if trip.reaction is not Reaction.OVERLOAD:
            return
        self.overloaded = True
        if self.cell_locked_s is None:
            self.cell_locked_s = self.clock_s
            self.emit("cell_locked", Severity.STOP)

    def tell_limit(self, trip: Trip, what: str, severity: Severity) -> None:
        by_hand = self.monitor_only and severity is not Severity.CAUTION
        self.emit(
            "limit",
            severity,
            row=trip.row,
            value=trip.value if isfinite(trip.value) else None,
            limit=trip.limit if isfinite(trip.limit) else None,
            unit=trip.unit,
            what=what,
            did="told" if self.monitor_only else trip.reaction.value,
            do_now=STOP_BY_HAND if by_hand else ROWS[trip.row].do_now,
            first=self.is_first(what),
        )

    def is_first(self, what: str) -> bool:
        """Mark the first cause among what follows from it."""
        if not self.first_cause:
            self.first_cause = what
        return self.first_cause == what

    # --- the run

    def end_run(self, verdict: Verdict, reason: str) -> None:
        """The loading is over; what is left is the tail, until aftermath.py closes it."""
        run = self.run
        if run is None or run.ended:
            return
        run.verdict, run.ended_reason, run.ended_s = verdict, reason, self.clock_s

    @property
    def raw_position_mm(self) -> float | None:
        """As the channel counts it."""
        at_mm = self.travel.at_mm if self.travel is not None else None
        return at_mm * self.setup.towards if at_mm is not None else None

    @property
    def armed(self) -> bool:
        return self.run is not None and self.run.started_s is not None and self.state in ARMED

    @property
    def moving(self) -> bool:
        """A motion command is in force."""
        return self.move_now is not None

    @property
    def net_n(self) -> float:
        return self.gross_n - self.tare_n

    @property
    def touch_n(self) -> float:
        return touch_n(self.setup.capacity_n, self.sigma_n)

    def busy_why(self) -> list[str]:
        """What stands against any motion, whoever asks."""
        found = [f"state is {self.state.value}"] if self.state in LATCHED | MOVING | BROKEN else []
        if self.stopping is not None:
            found.append("the crosshead has not been seen to stand")
        if self.polarity_locked_s is not None or not self.proven.polarity:
            found.append("polarity is not proven: push on the fixture by hand")
        if not isfinite(self.gross_n):
            found.append("no force signal")
        if self.travel is not None and self.travel.at_mm is None:
            found.append("no position signal")
        found += [f"{name.replace('_', ' ')}: {self._input_word(name)}" for name in self.inputs_against()]
        found += list(self.blocks.values())
        return found

    def inputs_against(self) -> list[str]:
        """Status inputs that forbid motion: active, or not known."""
        dangers = ("shield_open", "emergency_stop", "drive_fault")
        return [n for n, v in self.inputs.items() if v is None or (n in dangers and v is not False)]

    def _input_word(self, name: str) -> str:
        return "not known" if self.inputs[name] is None else "active"

    def cards(self, plan: RunSetup) -> Mapping[str, Json]:
        """Every card of the run, resolved, so that the stream alone can rebuild a record."""
        return {
            "frame": self.setup.frame.model_dump(mode="json"),
            "method": plan.method.model_dump(mode="json"),
            "specimen_card": plan.specimen.model_dump(mode="json"),
            "fixture": plan.fixture.name,
            "run": dict(plan.run),
        }


_CAUSES: Mapping[Reaction, Cause] = {
    Reaction.STOP: Cause.LIMIT_PASSED,
    Reaction.OVERLOAD: Cause.OVERLOADED,
    Reaction.SIGNAL_LOST: Cause.SIGNAL_LOST,
}
