"""Pipeline.advance: the ONE place where the order is written. Values in, values out; time is an argument.

Each sample passes: signal, limits, fracture watch, and every few milliseconds of samples a beat of the
stages. The shell obeys the actions of a Step, then records, then shows. Blocks of more than 64 samples are
taken bin by bin: where numpy proves that nothing can happen in a stretch it is taken whole, elsewhere the
scalar definition decides. Both give the same answer, and so does any cut of the stream into blocks.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from math import isfinite

from daq.cards.frame import FrameCard
from daq.stream.block import Block, Floats
from daq.watch import desk, findings, outside, position, signal, stages
from daq.watch.core import Core
from daq.watch.limits import INFINITE, Reaction
from daq.watch.repeats import Repeats
from daq.watch.requests import Request
from daq.watch.setup import Proven, WatchSetup, setup_from_card
from daq.watch.states import BROKEN, LATCHED
from daq.watch.values import Json, State, Step, Stop

__all__ = ["Pipeline", "Proven", "WatchSetup", "setup_from_card"]

MUST_LOOK = frozenset({State.UNKNOWN, State.OVERLOAD, State.BROKEN_STILL_LOADED})
SCALAR_SAMPLES_MAX = 64
STRETCH_MIN = 24
TICK_BEATS = 2.0
BEAT_S_MIN = 0.01
CALM = frozenset({State.AT_REST, State.READY, State.LOADING, State.HOLDING})
CALM_SIGMA = 4.0  # below the threshold of the fracture watch (6 by default): a drop is judged as it comes
SIGN_BLANKING_S = 0.9
OUTLIERS_TOLD, OUTLIERS_EVERY = 3, 100
NAN = float("nan")


class Pipeline:
    """One frame's watch."""

    def __init__(self, frame: FrameCard, *, clean_start: bool, proven: Proven) -> None:
        self.setup = setup_from_card(frame)
        self._core = Core(self.setup, clean_start=clean_start, proven=proven)
        force, place = self.setup.force, self.setup.position
        self._force, self._source = force, force.source
        self._position_column = place.column if place and place.source == force.source else None
        self._others = bool(self.setup.others)
        self._silence = signal.Silence(len(self.setup.sources))
        self._repeats = Repeats()
        self._beat_samples = self._core.watch.level.bin_samples
        self._beat_left, self._beat_s = self._beat_samples, 0.0
        self._beat_period_s = max(self._beat_samples / self.setup.rate_hz, BEAT_S_MIN)
        self.ticked = (
            False  # the last advance changed something by time alone: a silence, a beat without samples
        )

    # --- public

    @property
    def plain_lag_s(self) -> float:
        """Samples not older than this when they come leave no beat to time alone."""
        return TICK_BEATS * self._beat_period_s

    @property
    def state(self) -> State:
        return self._core.state

    @property
    def armed(self) -> bool:
        """A started run, from approach to holding."""
        return self._core.armed

    @property
    def moving(self) -> bool:
        """A motion command is in force: of a run, a jog or a return. The keep-alive is needed here too."""
        return self._core.moving

    @property
    def stopping(self) -> bool:
        """A STOP has been sent and no standstill been seen yet."""
        return self._core.stopping is not None

    @property
    def at_stake(self) -> bool:
        """Something moves, is to stop, or stands under a run's load: not a moment to leave without a STOP."""
        return self.moving or self.stopping or self.armed

    @property
    def must_look(self) -> bool:
        """What a restart must not forget: a person has to look at the frame before anything moves."""
        return self.state in MUST_LOOK or self.polarity_locked

    @property
    def polarity_locked(self) -> bool:
        """A wrong sign was seen and the polarity has not been proven since."""
        return self._core.polarity_locked_s is not None

    @property
    def run(self) -> Mapping[str, Json] | None:
        run = self._core.run
        return run.plan.run if run is not None else None

    def tell_stops(self, at_once: Callable[[Stop], None]) -> None:
        """Who hears of a Stop the moment it is decided, so that its bytes need not wait for what follows from it.
        Changes no decision: the Stop stands in the Step all the same, as its first action.
        """
        self._core.at_once = at_once

    def advance(self, block: Block | None, now_s: float) -> Step:
        """Judge a block of any source, and silence. None is a tick: to be called every 10 ms at least."""
        core = self._core
        if block is not None and block.count:
            self._silence.hear(core, block, now_s)
            if block.source == self._source:
                self._force_block(block)
            else:
                position.other_block(core, block)
        self._tick(now_s)
        return core.take_step()

    @property
    def limit_n(self) -> float:
        """The lowest force limit of the moment, gross."""
        return self._core.judge.high_n

    def would_stop(self, gross_n: float, beyond: int) -> bool:
        """Would this force, after so many beyond a limit that have not been judged yet, stop a loading? Changes
        nothing: the bench asks it of a row that has been read and not yet numbered or timed, so that STOP need not
        wait for that work. Only above the limits: below zero a ring-down has to be told from a wrong sign, in time.
        """
        core = self._core
        if not gross_n > core.judge.high_n or not core.watched or core.stopping is not None:
            return False
        passed = core.judge.next_passes(gross_n, beyond)
        return passed is not None and passed not in core.tripped_rows and not core.monitor_only

    def calm_band_n(self) -> tuple[float, float, bool] | None:
        """Gross force, N, between which the next rows can wait to be judged, and whether all is calm: some milliseconds
        then, else (on the way to the bar, seating, stopping, after a break, while a drop is looked at) one at most.
        None: a limit is being looked at, each row is to be judged as it comes.
        """
        core, watch, judge = self._core, self._core.watch, self._core.judge
        if judge.outside:
            return None
        calm = core.state in CALM and core.stopping is None and watch.candidate is None
        low_n = max(judge.low_n, core.gross_n - CALM_SIGMA * watch.level.sigma_n) if calm else judge.low_n
        return low_n, judge.high_n, calm

    def inputs(self, values: Mapping[str, bool | None], now_s: float) -> Step:
        """Status inputs as the machine tells them; None is not known, and counts as a fault where it matters."""
        self._clock(now_s)
        for name, active in values.items():
            outside.status_input(self._core, name, active)
        return self._core.take_step()

    def request(self, request: Request, now_s: float) -> Step:
        """What a person asks; raises Refused with the list of missing conditions, and then changes nothing."""
        self._clock(now_s)
        desk.handle(self._core, request)
        return self._core.take_step()

    def fault(self, name: str, detail: str, now_s: float, *, where: str = "") -> Step:
        """A fault told by a driver or by another process; names in daq.watch.faults. where: which of several alike."""
        self._clock(now_s)
        outside.fault(self._core, name, detail, where)
        return self._core.take_step()

    def fault_over(self, name: str, now_s: float, *, where: str = "") -> Step:
        """A fault that blocks the start is gone, there and not elsewhere; never lifts a latch."""
        self._clock(now_s)
        self._core.blocks.pop((name, where), None)
        return self._core.take_step()

    def snapshot(self) -> Mapping[str, Json]:
        """Current values for views."""
        core, run = self._core, self._core.run
        net = core.net_n if isfinite(core.gross_n) else None
        expected = run.plan.expected.load_p50_n if run is not None else None
        return {
            "state": core.state.value,
            "gross_n": core.gross_n if net is not None else None,
            "net_n": net,
            "tare_n": core.tare_n,
            "sigma_n": core.watch.level.sigma_n,
            "position_mm": core.raw_position_mm,
            "time_s": core.clock_s,
            "expected_n": expected,
            "percent_expected": 100.0 * net / expected if net is not None and expected else None,
            "run_id": str(run.plan.run["run_id"]) if run is not None else None,
            "specimen": str(run.plan.run["specimen"]) if run is not None else None,
            "armed": core.armed,
            "moving": core.moving,
            "force_n_max": core.limits.ceiling_n,
            "inputs": dict(core.inputs),
            "cell_locked_s": core.cell_locked_s,
            "polarity_locked_s": core.polarity_locked_s,
            "missing": tuple(core.busy_why()),
        }

    # --- the scalar definition

    def _force_block(self, block: Block) -> None:
        if block.count <= SCALAR_SAMPLES_MAX:
            self._scalar(block, 0, block.count)
        else:
            self._long(block)

    def _scalar(self, block: Block, start: int, end: int) -> None:
        core, force, place = self._core, self._force, self._position_column
        scale, offset, sign, column = force.scale, force.offset, force.sign, force.column
        index = block.first_index + start
        times, rows = block.time_s[start:end].tolist(), block.counts[start:end].tolist()
        for time_s, row in zip(times, rows, strict=True):
            core.clock_s = time_s
            count = row[column]
            self._sample(index, time_s, count, sign * (count * scale + offset))
            if place is not None:
                position.sample(core, time_s, row[place])
            self._beat_left -= 1
            if self._beat_left == 0:
                self._beat(time_s, row)
            index += 1

    def _sample(self, index: int, time_s: float, count: float, gross_n: float) -> None:
        """One force sample: limits before everything else, then the signal, then what it means for the bar."""
        core = self._core
        judge = core.judge
        if judge.low_n <= gross_n <= judge.high_n:
            if judge.outside:
                judge.inside()
                if judge.outliers <= OUTLIERS_TOLD or judge.outliers % OUTLIERS_EVERY == 0:
                    core.emit("limit_outlier", outliers=judge.outliers)
        elif not self._outside(time_s, gross_n):
            core.gross_n = NAN
            self._repeats.forget()
            return
        core.gross_n = gross_n
        same = self._repeats.feed(time_s, count)
        if same:
            signal.frozen(core, same, self._repeats.since_s, time_s)
        net_n = gross_n - core.tare_n
        if core.runaway is not None:
            trip = core.runaway.judge(net_n, core.watch.highest)
            if trip is not None:
                core.trip(trip)
        elif core.collector is not None:
            core.collector.times_s.append(time_s)
            core.collector.gross_n.append(gross_n)
        finding = core.watch.feed(index, time_s, net_n)
        if finding is not None:
            findings.found(core, finding)

    def _outside(self, time_s: float, gross_n: float) -> bool:
        """A sample outside the force limits; False where it is no number at all."""
        core = self._core
        if isfinite(gross_n) and self._rings(time_s, gross_n):
            return True
        trip = core.judge.judge(gross_n)
        if trip is None:
            return isfinite(gross_n)
        graver = trip.reaction is Reaction.OVERLOAD and core.state is not State.SIGNAL_LOST
        if core.state not in LATCHED or graver:
            if trip.reaction is Reaction.SIGNAL_LOST:
                signal.lost(core, trip.what)
            elif signal.jumped_to_rail(core, gross_n):
                signal.lost(core, "the converter is at its rail")
            else:
                core.trip(trip)
        return isfinite(gross_n)

    def _rings(self, time_s: float, gross_n: float) -> bool:
        """A released load train swings to -F. Before the break is confirmed the open candidate judges that swing
        (and calls a mirrored signal lost). For 0.1 s after it no force limit but the rails is raised; the sign for
        a second, because 50 Hz at 1 % damping rings that long and a polarity lock would be nonsense.
        """
        core = self._core
        if not core.limits.rail_low_n <= gross_n <= core.limits.rail_high_n:
            return False
        if core.state in BROKEN:
            sign_s = SIGN_BLANKING_S if gross_n < core.judge.low_n else 0.0
            return time_s < core.blank_until_s + sign_s
        return gross_n < core.judge.low_n and core.watched and core.watch.armed

    def _beat(self, time_s: float, row: list[float] | None) -> None:
        """row: the newest one, None where there is none."""
        self._beat_left, self._beat_s = self._beat_samples, time_s
        if row is not None and self._core.frozen_samples is None:
            signal.learn_still(self._core, self._repeats, time_s)
        if row is not None and self._others:
            signal.others(self._core, row)
        stages.beat(self._core)

    # --- proven-quiet stretches

    def _long(self, block: Block) -> None:
        force, place, end = self._force, self._position_column, block.count
        counts = block.counts[:, force.column]
        gross_n = force.sign * (counts * force.scale + force.offset)
        at_mm = position.scaled(self._core, block.counts[:, place]) if place is not None else None
        start = 0
        while start < end:
            stop = min(start + self._core.watch.level.room, start + self._beat_left, end)
            part = slice(start, stop)
            where = at_mm[part] if at_mm is not None else None
            long_enough = stop - start >= STRETCH_MIN
            if not long_enough or not self._stretch(block, part, counts[part], gross_n[part], where):
                self._scalar(block, start, stop)
            start = stop

    def _stretch(
        self, block: Block, part: slice, counts: Floats, gross_n: Floats, at_mm: Floats | None
    ) -> bool:
        """Take a stretch at once if nothing can happen in it; False leaves everything untouched."""
        core, times_s = self._core, block.time_s[part]
        judge = core.judge
        inside = judge.low_n <= float(gross_n.min()) and float(gross_n.max()) <= judge.high_n
        if judge.outside or not inside or (at_mm is not None and not position.quiet(core, at_mm)):
            return False
        if self._repeats.longest(counts) + 1 >= (core.frozen_samples or core.still_samples or INFINITE):
            return False
        net_n = gross_n - core.tare_n
        if core.runaway is not None and not core.runaway.quiet(net_n):
            return False
        residuals = core.watch.quiet(times_s, net_n)
        if residuals is None:
            return False
        self._repeats.take(times_s, counts)
        if at_mm is not None:
            position.take(core, times_s[:-1], at_mm[:-1])
        self._take(block.first_index + part.start, times_s, gross_n, net_n, residuals)
        if at_mm is not None:
            position.take(core, times_s[-1:], at_mm[-1:])
        self._beat_left -= len(net_n)
        if self._beat_left == 0:
            self._beat(core.clock_s, block.counts[part.stop - 1].tolist())
        return True

    def _take(
        self,
        index: int,
        times_s: Floats,
        gross_n: Floats,
        net_n: Floats,
        residuals: Floats,
    ) -> None:
        core = self._core
        runaway = core.runaway
        core.clock_s, core.gross_n = float(times_s[-1]), float(gross_n[-1])
        if runaway is not None:
            runaway.take(net_n.tolist())
        elif core.collector is not None:
            core.collector.times_s += times_s.tolist()
            core.collector.gross_n += gross_n.tolist()
        finding = core.watch.take(index, times_s, net_n, residuals)
        if finding is not None:
            findings.found(core, finding)

    # --- time

    def _clock(self, now_s: float) -> None:
        self._core.clock_s = max(self._core.clock_s, now_s)

    def _tick(self, now_s: float) -> None:
        """Silence, and the beats that samples do not give: while samples flow, their own times decide alone."""
        core = self._core
        self.ticked = self._silence.judge(core, now_s)
        if now_s - max(self._beat_s, core.clock_s) > TICK_BEATS * self._beat_period_s:
            core.clock_s, self.ticked = now_s, True
            self._beat(now_s, None)
