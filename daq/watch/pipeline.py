"""Pipeline.advance: the ONE place where the order is written. Values in, values out; time is an argument.

Each sample: continuity and signal, limits, fracture watch, then (every few milliseconds of samples) stages.
The shell obeys the actions of the Step, then records, then shows. A block longer than 64 samples is taken bin
by bin: where numpy proves that no sample of the stretch can change anything, the stretch is taken whole;
where it cannot, the scalar definition decides. Both give the same answer, and so does any cut of the stream
into blocks.
"""

from __future__ import annotations

from collections.abc import Mapping
from math import isfinite

import numpy as np

from daq.cards.frame import FrameCard
from daq.stream.block import GAP_UNKNOWN, Block, Floats
from daq.watch import desk, stages
from daq.watch.core import Core
from daq.watch.drops import Drop, slope_between
from daq.watch.drops import window_s as drop_window_s
from daq.watch.faults import FAULTS, UNLISTED
from daq.watch.fracture import Finding, Kind
from daq.watch.limits import CAUTION_SHARE, Reaction, Trip
from daq.watch.requests import Request
from daq.watch.setup import Proven, WatchSetup, setup_from_card
from daq.watch.states import ARMED, BROKEN, LATCHED, MOVING, WATCHED, Cause
from daq.watch.values import Json, Severity, State, Step, Verdict

__all__ = ["Pipeline", "Proven", "WatchSetup", "setup_from_card"]

SCALAR_SAMPLES_MAX = 64
STRETCH_MIN = 24
GAP_SAMPLES_MAX = 5
FROZEN_S, FROZEN_SAMPLES = 0.05, 5
BLANKING_S = 0.1
TICK_BEATS = 2.0
BACK_S = 0.5
UNEXPLAINED_SHARE = 0.5


class Pipeline:
    """One frame's watch."""

    def __init__(self, frame: FrameCard, *, clean_start: bool, proven: Proven) -> None:
        self.setup = setup_from_card(frame)
        self._core = Core(self.setup, clean_start=clean_start, proven=proven)
        force, position = self.setup.force, self.setup.position
        self._force, self._source = force, force.source
        self._position_column = position.column if position and position.source == force.source else None
        self._towards = self.setup.towards
        self._heard_s: list[float | None] = [None] * len(self.setup.sources)
        self._lost: set[int] = set()
        self._count = float("nan")
        self._same = 0
        self._same_since_s = 0.0
        self._beat_samples = self._core.watch.level.bin_samples
        self._beat_left = self._beat_samples
        self._beat_s = 0.0
        self._beat_period_s = max(self._beat_samples / self.setup.rate_hz, 0.01)
        self._back_since_s: float | None = None

    # --- public

    @property
    def state(self) -> State:
        return self._core.state

    @property
    def armed(self) -> bool:
        """A started run in approach to holding: the keep-alive is earned only here (and while `moving`)."""
        return self._core.armed

    @property
    def moving(self) -> bool:
        """A motion command is in force (a run, a jog or a return)."""
        return self._core.moving

    @property
    def run(self) -> Mapping[str, Json] | None:
        run = self._core.run
        return run.plan.run if run is not None else None

    def advance(self, block: Block | None, now_s: float) -> Step:
        """Judge a block of any source, or silence."""
        if block is not None:
            self._hear(block, now_s)
            if block.source == self._source:
                self._force_block(block)
            else:
                self._other_block(block)
        self._tick(now_s)
        return self._core.take_step()

    def inputs(self, values: Mapping[str, bool | None], now_s: float) -> Step:
        """Status inputs as the machine tells them; None is not known, and counts as a fault where it matters."""
        core = self._core
        core.clock_s = max(core.clock_s, now_s)
        for name, active in values.items():
            if name in core.inputs and core.inputs[name] is active:
                continue
            core.inputs[name] = active
            core.emit("input", name=name, active=active)
            self._input(name, active)
        return core.take_step()

    def request(self, request: Request, now_s: float) -> Step:
        """What a person asks; raises Refused with the list of missing conditions, and then changes nothing."""
        self._core.clock_s = max(self._core.clock_s, now_s)
        desk.handle(self._core, request)
        return self._core.take_step()

    def fault(self, name: str, detail: str, now_s: float) -> Step:
        """A fault told by a driver or by another process; names in daq.watch.faults."""
        core = self._core
        core.clock_s = max(core.clock_s, now_s)
        reaction = FAULTS.get(name, UNLISTED)
        if reaction.blocks_start:
            core.blocks[name] = f"{reaction.what} ({detail})" if detail else reaction.what
        if reaction.cause is not None:
            core.stop(reaction.what, reaction.cause)
        core.emit(
            "fault",
            reaction.severity,
            name=name,
            detail=detail,
            what=reaction.what,
            did="stopped" if reaction.cause is not None else "told",
            do_now=reaction.do_now,
            first=core.is_first(reaction.what),
        )
        if reaction.cause is not None:
            lost = reaction.cause is Cause.SIGNAL_LOST
            core.end_run(Verdict.SIGNAL_LOST if lost else Verdict.STOPPED, reaction.what)
        return core.take_step()

    def fault_over(self, name: str, now_s: float) -> Step:
        """A blocking fault is gone; never lifts a latch."""
        self._core.clock_s = max(self._core.clock_s, now_s)
        self._core.blocks.pop(name, None)
        return self._core.take_step()

    def snapshot(self) -> Mapping[str, Json]:
        """Current values for views."""
        core, run = self._core, self._core.run
        known = isfinite(core.gross_n)
        expected = run.plan.expected.load_p50_n if run is not None else None
        net = core.net_n if known else None
        return {
            "state": core.state.value,
            "gross_n": core.gross_n if known else None,
            "net_n": net,
            "tare_n": core.tare_n,
            "sigma_n": core.watch.level.sigma_n,
            "position_mm": self._raw_position(),
            "time_s": core.clock_s,
            "expected_n": expected,
            "percent_expected": 100.0 * net / expected if net is not None and expected else None,
            "run_id": str(run.plan.run["run_id"]) if run is not None else None,
            "specimen": str(run.plan.run["specimen"]) if run is not None else None,
            "armed": core.armed,
            "moving": core.moving,
            "force_n_max": core.limits.ceiling_n,
            "inputs": dict(core.inputs),
            "missing": tuple(core.busy_why()),
        }

    def _raw_position(self) -> float | None:
        travel = self._core.travel
        return travel.at_mm * self._towards if travel is not None and travel.at_mm is not None else None

    # --- continuity and signal

    def _hear(self, block: Block, now_s: float) -> None:
        if block.count == 0:
            return
        last_s = min(float(block.time_s[-1]), now_s)
        heard_s = self._heard_s[block.source]
        self._heard_s[block.source] = last_s if heard_s is None else max(heard_s, last_s)
        if block.gap_samples != 0 and heard_s is not None:
            self._gap(block, float(block.time_s[0]) - heard_s)

    def _gap(self, block: Block, span_s: float) -> None:
        core, source = self._core, self.setup.sources[block.source]
        core.clock_s = max(core.clock_s, float(block.time_s[0]))
        known = block.gap_samples != GAP_UNKNOWN
        missing = block.gap_samples if known else round(span_s * source.rate_hz) - 1
        core.emit("gap", source=source.name, missing=missing if known else None, span_s=span_s)
        if missing > GAP_SAMPLES_MAX and block.source == self._source and (core.armed or core.moving):
            self._signal_lost(f"{missing} samples are missing")

    def _signal_lost(self, why: str) -> None:
        core = self._core
        if core.state in (State.SIGNAL_LOST, State.UNKNOWN):
            return
        last = core.gross_n if isfinite(core.gross_n) else None
        if core.run is None and not core.moving:
            core.go(Cause.SIGNAL_LOST, why)
            core.emit("signal_lost", Severity.CAUTION, why=why, channel=self._force.name, last_n=last)
            return
        core.trip(Trip(15, last if last is not None else float("nan"), 0.0, "N", Reaction.SIGNAL_LOST, why))
        core.emit("signal_lost", Severity.STOP, why=why, channel=self._force.name, last_n=last)

    # --- samples of the force link

    def _force_block(self, block: Block) -> None:
        if block.count <= SCALAR_SAMPLES_MAX:
            self._scalar(block, 0, block.count)
            return
        place, end = 0, block.count
        values, at_mm = self._scaled(block)
        while place < end:
            room = min(self._core.watch.level.room, self._beat_left, end - place)
            if room >= STRETCH_MIN and self._stretch(block, values, at_mm, place, place + room):
                place += room
                continue
            step = min(max(room, 1), end - place)
            self._scalar(block, place, place + step)
            place += step

    def _scalar(self, block: Block, start: int, end: int) -> None:
        """The definition. Everything per sample in order: signal, limits, fracture watch."""
        force, position_column, index = self._force, self._position_column, block.first_index + start
        times, rows = block.time_s[start:end].tolist(), block.counts[start:end].tolist()
        scale, offset, sign, column = force.scale, force.offset, force.sign, force.column
        for time_s, row in zip(times, rows, strict=True):
            count = row[column]
            if position_column is not None:
                self._position(time_s, row[position_column])
            self._sample(index, time_s, count, sign * (count * scale + offset))
            index += 1

    def _sample(self, index: int, time_s: float, count: float, gross_n: float) -> None:
        core = self._core
        core.clock_s = time_s
        judge = core.judge
        if not judge.low_n <= gross_n <= judge.high_n:
            if not self._outside(time_s, gross_n):
                core.gross_n = float("nan")
                self._count_beat(time_s)
                return
        elif judge.inside():
            core.emit("limit_outlier", outliers=judge.outliers)
        core.gross_n = gross_n
        if count == self._count:
            self._same += 1
            if self._same >= FROZEN_SAMPLES:
                self._frozen(time_s)
        else:
            self._count, self._same, self._same_since_s = count, 0, time_s
        net_n = gross_n - core.tare_n
        run = core.run
        if run is not None:
            if run.runaway is not None and core.move_now is not None and core.state in WATCHED:
                trip = run.runaway.judge(net_n, core.watch.highest)
                if trip is not None:
                    core.trip(trip)
            if core.collector is not None:
                core.collector.times_s.append(time_s)
                core.collector.gross_n.append(gross_n)
        finding = core.watch.feed(index, time_s, net_n)
        if finding is not None:
            self._found(finding)
        self._count_beat(time_s)

    def _count_beat(self, time_s: float) -> None:
        self._beat_left -= 1
        if self._beat_left == 0:
            self._beat(time_s)

    def _beat(self, time_s: float) -> None:
        self._beat_left = self._beat_samples
        self._beat_s = time_s
        stages.beat(self._core)

    def _outside(self, time_s: float, gross_n: float) -> bool:
        """A sample outside the force limits; False where it must not be used for anything else."""
        core = self._core
        finite = isfinite(gross_n)
        blank = core.state in BROKEN and time_s < core.blank_until_s
        swings = core.watch.candidate is not None and gross_n < core.judge.low_n    # a released load train rings
        if finite and (blank or swings):
            return True
        trip = core.judge.judge(gross_n)
        graver = trip is not None and trip.reaction is Reaction.OVERLOAD and core.state is not State.SIGNAL_LOST
        if trip is not None and (core.state not in LATCHED or graver):
            if trip.reaction is Reaction.SIGNAL_LOST:
                self._signal_lost(trip.what)
            elif self._jumped_to_rail(gross_n):
                self._signal_lost("the converter is at its rail")
            else:
                core.trip(trip)
        if not finite:
            self._count = float("nan")
        return finite

    def _jumped_to_rail(self, gross_n: float) -> bool:
        """A rail reached from the middle of the range is a broken wire; from near the top it is an overload."""
        low_n, high_n = self.setup.rails_n
        before_n = self._core.gross_n
        return not low_n <= gross_n <= high_n and not abs(before_n) >= CAUTION_SHARE * self.setup.capacity_n

    def _frozen(self, time_s: float) -> None:
        """Identical raw values for longer than this signal shows by chance."""
        core = self._core
        needed = core.frozen_samples
        if needed is None or self._same + 1 < needed or time_s - self._same_since_s < FROZEN_S:
            return
        if core.armed and core.state is not State.STOPPED:
            self._signal_lost("the value stands still")

    # --- proven-quiet stretches

    def _scaled(self, block: Block) -> tuple[Floats, Floats | None]:
        force, position = self._force, self.setup.position
        values = force.sign * (block.counts[:, force.column] * force.scale + force.offset)
        if self._position_column is None or position is None:
            return values, None
        raw = block.counts[:, position.column]
        return values, self._towards * (position.sign * (raw * position.scale + position.offset))

    def _stretch(self, block: Block, values: Floats, at_mm: Floats | None, start: int, end: int) -> bool:
        """Take samples start..end at once if nothing can happen in them; False leaves everything untouched."""
        core, gross = self._core, values[start:end]
        times = block.time_s[start:end]
        judge = core.judge
        if judge.low_n <= float(gross.min()) and float(gross.max()) <= judge.high_n:
            pass
        else:
            return False
        if judge.pending or not self._positions_quiet(at_mm, start, end):
            return False
        counts = block.counts[start:end, self._force.column]
        if bool((counts[1:] == counts[:-1]).any()) or counts[0] == self._count:
            return False
        net = gross - core.tare_n
        run = core.run
        runaway = (
            run.runaway if run is not None and core.move_now is not None and core.state in WATCHED else None
        )
        if runaway is not None and not runaway.quiet(net):
            return False
        residuals = core.watch.quiet(times, net)
        if residuals is None:
            return False
        self._take(block.first_index + start, times, counts, gross, net, residuals, at_mm, end)
        return True

    def _take(
        self,
        index: int,
        times: Floats,
        counts: Floats,
        gross: Floats,
        net: Floats,
        residuals: Floats,
        at_mm: Floats | None,
        end: int,
    ) -> None:
        core, run = self._core, self._core.run
        core.clock_s, core.gross_n = float(times[-1]), float(gross[-1])
        self._count, self._same, self._same_since_s = float(counts[-1]), 0, core.clock_s
        if at_mm is not None and core.travel is not None:
            core.bands.inside()
            for time_s, at in zip(times.tolist(), at_mm[end - len(net) : end].tolist(), strict=True):
                core.travel.feed(time_s, at)
        if (
            run is not None
            and run.runaway is not None
            and core.move_now is not None
            and core.state in WATCHED
        ):
            run.runaway.take(net.tolist())
        if core.collector is not None:
            core.collector.times_s += times.tolist()
            core.collector.gross_n += gross.tolist()
        finding = core.watch.take(index, times, net, residuals)
        if finding is not None:
            self._found(finding)
        self._beat_left -= len(net)
        if self._beat_left == 0:
            self._beat(core.clock_s)

    def _positions_quiet(self, at_mm: Floats | None, start: int, end: int) -> bool:
        if at_mm is None:
            return True
        bands, part = self._core.bands, at_mm[start:end]
        return (
            bool(np.isfinite(part).all())
            and bands.low_mm <= float(part.min())
            and float(part.max()) <= bands.high_mm
        )

    # --- what was found

    def _found(self, finding: Finding) -> None:
        core, run = self._core, self._core.run
        if run is None or (run.ended and run.finding is not None):
            return
        if finding.kind is Kind.GLITCH:
            core.emit("glitch", off_n=finding.drop, samples=finding.samples, onset_s=finding.onset_s)
            stages.count(core, run, "glitch")
            return
        if run.flat is not None:
            run.flat.restart()
        if finding.kind is Kind.LOST:
            self._signal_lost("the value stands still after a change")
        elif self._explained_by_motion(finding):
            back = core.travel.back_from_top_mm(finding.onset_s - 0.2) if core.travel else 0.0
            if not run.ended:
                stages.load_taken_off(core, run, back)
        elif finding.kind is Kind.PARTIAL:
            self._partial(finding)
        elif finding.kind is Kind.REBASELINE:
            core.emit("rebaseline", onset_s=finding.onset_s, by=finding.by, step_n=-finding.drop)
        else:
            self._broke(finding)

    def _explained_by_motion(self, finding: Finding) -> bool:
        """Did the crosshead go back far enough to have taken off half of what the force lost?"""
        core, run = self._core, self._core.run
        if core.travel is None or run is None or finding.drop <= 0:
            return False
        back_mm = core.travel.back_from_top_mm(finding.onset_s - 0.2)
        seen = back_mm > 4.0 * core.travel.resolution_mm and back_mm > 0
        lost_n = UNEXPLAINED_SHARE * finding.drop
        return seen and back_mm * run.plan.expected.stiffness_n_mm >= lost_n

    def _partial(self, finding: Finding) -> None:
        core, run = self._core, self._core.run
        assert run is not None
        if run.drop is not None:
            stages.tell_drop(core, run, seen=False)
        if run.ended:
            return
        level, setup = core.watch.level, self.setup
        window_s = drop_window_s(setup.rate_hz, finding.sigma_n, max(finding.slope_n_s, 1e-9))
        before = slope_between(level.history, finding.last_good_s - window_s, finding.last_good_s)
        if run.seating is not None:
            run.seating.restart()
        run.drop = Drop(
            onset_s=finding.onset_s,
            settled_s=finding.time_s,
            load_n=finding.forecast,
            drop_n=finding.drop,
            slope_before_n_s=before,
            until_s=finding.time_s + window_s,
        )

    def _broke(self, finding: Finding) -> None:
        core, run = self._core, self._core.run
        assert run is not None
        verdict = _VERDICTS[finding.kind]
        watched = core.state in WATCHED
        core.stop(verdict.value)
        if watched:
            core.go(Cause.BROKE, verdict.value)
        core.blank_until_s = finding.time_s + BLANKING_S
        if run.drop is not None:
            stages.tell_drop(core, run, seen=False)
        run.finding = finding
        run.peak_n = max(finding.forecast, 0.0)
        core.emit(
            "fracture",
            Severity.STOP if verdict is Verdict.UNCLEAR else Severity.REMARK,
            **self._fracture_fields(finding, verdict),
        )
        core.watch.watch(False)
        if run.ended:
            run.verdict = verdict
            run.aftermath = None
            run.ended_s = core.clock_s
        core.end_run(verdict, verdict.value)

    def _fracture_fields(self, finding: Finding, verdict: Verdict) -> dict[str, Json]:
        tare_n = self._core.tare_n
        return {
            "verdict": verdict.value,
            "by": finding.by,
            "onset_s": finding.onset_s,
            "last_good_s": finding.last_good_s,
            "first_dropped_s": finding.first_dropped_s,
            "last_good_index": finding.last_good_index,
            "peak_raw_n": finding.peak_raw + tare_n,
            "forecast_n": finding.forecast + tare_n,
            "forecast_slope_n_s": finding.slope_n_s,
            "sigma_n": finding.sigma_n,
            "fall_s": finding.fall_s,
            "level_n": finding.level + tare_n,
            "delay_s": finding.time_s - finding.onset_s,
        }

    # --- position and other links

    def _position(self, time_s: float, count: float) -> None:
        core, position = self._core, self.setup.position
        assert position is not None and core.travel is not None
        at_mm = self._towards * position.value(count)
        if not isfinite(at_mm):
            core.clock_s = max(core.clock_s, time_s)
            self._position_lost("position is not a number")
            return
        core.travel.feed(time_s, at_mm)
        bands = core.bands
        if bands.low_mm <= at_mm <= bands.high_mm:
            bands.inside()
            return
        core.clock_s = max(core.clock_s, time_s)
        trip = bands.judge(at_mm)
        if trip is not None and core.state not in LATCHED | BROKEN:
            core.trip(trip)

    def _position_lost(self, why: str) -> None:
        core, run = self._core, self._core.run
        if core.travel is None or core.travel.at_mm is None:
            return
        core.travel.forget()
        if run is not None and core.armed and run.plan.method.limits.force_only_allowed:
            core.emit("displacement_lost", Severity.CAUTION, why=why)
            core.speed_watch = None
            return
        if core.armed or core.moving:
            core.trip(Trip(16, float("nan"), 0.0, "mm", Reaction.SIGNAL_LOST, "position signal lost: " + why))
        else:
            core.emit("displacement_lost", Severity.CAUTION, why=why)

    def _other_block(self, block: Block) -> None:
        position = self.setup.position
        if position is None or position.source != block.source:
            return
        for time_s, count in zip(
            block.time_s.tolist(), block.counts[:, position.column].tolist(), strict=True
        ):
            self._position(time_s, count)

    # --- silence and ticks

    def _tick(self, now_s: float) -> None:
        core = self._core
        for place, source in enumerate(self.setup.sources):
            heard_s = self._heard_s[place]
            if heard_s is None:
                continue
            silent = not now_s - heard_s <= source.silence_s
            if silent and place not in self._lost:
                self._lost.add(place)
                core.clock_s = max(core.clock_s, now_s)
                self._silent(place, now_s - heard_s)
            elif not silent and place in self._lost:
                self._lost.discard(place)
        self._signal_back(now_s)
        if now_s - max(self._beat_s, core.clock_s) > TICK_BEATS * self._beat_period_s:
            core.clock_s = now_s
            self._beat(now_s)

    def _silent(self, place: int, silent_s: float) -> None:
        why = f"no data for {silent_s:.3g} s"
        position = self.setup.position
        if place == self._source:
            self._signal_lost(why)
            self._core.gross_n = float("nan")
        if position is not None and position.source == place:
            self._position_lost(why)
        elif place != self._source:
            self._core.emit("channel_lost", Severity.CAUTION, why=why, channel=self.setup.sources[place].name)

    def _signal_back(self, now_s: float) -> None:
        """A loss at rest, with no run open and nothing moving, heals by itself after half a second of data."""
        core = self._core
        if core.state is not State.SIGNAL_LOST or core.run is not None or core.first_cause:
            self._back_since_s = None
            return
        if self._lost or not isfinite(core.gross_n):
            self._back_since_s = None
            return
        if self._back_since_s is None:
            self._back_since_s = now_s
        if now_s - self._back_since_s >= BACK_S and core.stopping is None:
            self._back_since_s = None
            core.go(Cause.SIGNAL_BACK)
            core.emit("signal_back")

    # --- inputs

    def _input(self, name: str, active: bool | None) -> None:
        core = self._core
        moving = core.state in MOVING | ARMED or core.moving
        if active is False:
            return
        if active is None:
            if moving and name != "moving":
                self._danger(f"{name.replace('_', ' ')} is not known", Cause.FAULT)
            return
        if name == "emergency_stop":
            self._danger("emergency stop", Cause.EMERGENCY)
        elif name == "drive_fault":
            self._danger("drive fault", Cause.FAULT)
        elif name == "shield_open" and moving:
            self._danger("shield open", Cause.SHIELD_OPENED)
        elif name == "shield_open" and core.state is State.READY:
            core.go(Cause.SHIELD_OPENED, "shield open: tare again")
            if core.run is not None:
                core.run.note, core.collector = None, None
        elif name in ("end_up", "end_down") and moving:
            self._danger("end switch", Cause.FAULT)

    def _danger(self, what: str, cause: Cause) -> None:
        core = self._core
        core.stop(what, cause)
        core.tell_limit(Trip(25, 1.0, 0.0, "", Reaction.STOP), what, Severity.STOP)
        core.end_run(Verdict.STOPPED, what)


_VERDICTS: Mapping[Kind, Verdict] = {
    Kind.SUDDEN: Verdict.SUDDEN_BREAK,
    Kind.GRADUAL: Verdict.GRADUAL_FAILURE,
    Kind.LASTING: Verdict.UNCLEAR,
}
