"""The tail of a loading: standstill, residual load, second break, zero after, and the close that always comes.

Works on the bin means of the fracture watch's level, so it sees what the watch accepted; commands only the back-off
after a clean break, and only where the card and the state of the bar allow it.
"""

from __future__ import annotations

from math import sqrt

from daq.watch.core import Aftermath, Core, Run
from daq.watch.states import Cause
from daq.watch.values import Move, MoveKind, Severity, State, Verdict

RESIDUAL_S = 0.3
MEAN_S = 0.1
RESIDUAL_SHARE, RESIDUAL_SIGMA = 0.05, 10.0
ZERO_S = 0.5
ZERO_SIGMA, ZERO_SHARE = 5.0, 0.002
RESTS_SIGMA = 10.0
SECOND_WITHIN_S, SECOND_SHARE, RELOAD_SHARE = 1.0, 0.2, 0.05
BLANKING_S = 0.1
TAIL_S_MIN = 0.5
CLOSE_S_MAX = 2.5
BROKE = frozenset({Verdict.SUDDEN_BREAK, Verdict.GRADUAL_FAILURE, Verdict.UNCLEAR})


def beat(core: Core) -> None:
    """One look at the tail."""
    run = core.run
    assert run is not None and run.ended_s is not None
    if run.aftermath is None:
        run.aftermath = Aftermath()
    seen = run.aftermath
    if core.stopping is None and seen.stood_s is None:
        seen.stood_s = core.clock_s
    if run.finding is not None:
        _residual(core, run, seen)
        _second(core, run, seen)
        _back_off(core, run, seen)
        _zero(core, run, seen)
    if _may_close(core, run, seen):
        close(core)


def close(core: Core) -> None:
    """The run ends here, whatever it was."""
    run = core.run
    assert run is not None
    verdict = run.verdict or Verdict.STOPPED
    core.emit(
        "run_closed",
        run_id=str(run.plan.run["run_id"]),
        verdict=verdict.value,
        reason=run.ended_reason,
        interrupted=verdict not in BROKE,
    )
    core.run, core.run_closed_s, core.collector = None, core.clock_s, None
    core.watch.watch(False)
    core.tripped_rows.clear()
    core.last_tare_n = run.note.tare_n if run.note is not None else core.last_tare_n
    core.limits_for_run()
    core.go(Cause.CLOSED, "run closed")
    core.set_bands()


def mean_since(core: Core, from_s: float) -> tuple[float, int] | None:
    """Mean of the bins since then, and how many samples that is."""
    level = core.watch.level
    bins = [x for t, x in level.history if t > from_s]
    if not bins:
        return None
    return sum(bins) / len(bins), len(bins) * level.bin_samples


def _residual(core: Core, run: Run, seen: Aftermath) -> None:
    assert run.ended_s is not None
    period_s = core.watch.level.period_s
    if seen.unloaded_s is not None or core.clock_s - run.ended_s < RESIDUAL_S:
        return
    found = mean_since(core, core.clock_s - max(MEAN_S, 3.5 * period_s))
    if found is None:
        return
    threshold_n = max(RESIDUAL_SHARE * run.peak_n, RESIDUAL_SIGMA * core.sigma_n)
    # below zero is a zero that was taken under load, if a person said so; else it is a signal not to be believed
    unloaded = found[0] < threshold_n and (found[0] > -threshold_n or run.tare_overridden)
    if unloaded or not seen.residual_told:
        seen.residual_told = True
        severity = Severity.REMARK if unloaded else Severity.CAUTION
        gross = found[0] + core.tare_n
        core.emit("residual", severity, force_n=gross, force_net_n=found[0], unloaded=unloaded)
    if unloaded:
        seen.unloaded_s = core.clock_s
        if core.state is State.BROKEN_STILL_LOADED:
            core.go(Cause.UNLOADED)


def _back_off(core: Core, run: Run, seen: Aftermath) -> None:
    """G4: only after "broken, unloaded", with a proven stop drill, the shield shut and a clear verdict."""
    motion = core.setup.frame.motion
    clear = run.verdict in (Verdict.SUDDEN_BREAK, Verdict.GRADUAL_FAILURE)
    if motion is None or not motion.backoff_auto or seen.backed_off or seen.stood_s is None or not clear:
        return
    if core.state is not State.BROKEN_UNLOADED or not core.proven.stop_drill or core.inputs_against():
        return
    if run.no_back_off or core.stopping is not None or core.polarity_locked_s is not None or core.blocks:
        return
    seen.backed_off = True
    core.go(Cause.SENT_AWAY, "back-off")
    core.move(Move(MoveKind.RETURN, -motion.return_mm_min, motion.backoff_mm))
    core.emit("returned", distance_mm=motion.backoff_mm, speed_mm_min=motion.return_mm_min)


def _second(core: Core, run: Run, seen: Aftermath) -> None:
    """Down, up again, and down by a fifth of the first peak: without the way up it is the pieces letting go."""
    assert run.ended_s is not None
    after_s = core.clock_s - run.ended_s
    if seen.second_told or after_s > SECOND_WITHIN_S or after_s < BLANKING_S + MEAN_S / 2:
        return
    found = mean_since(core, core.clock_s - max(MEAN_S / 2, 2.5 * core.watch.level.period_s))
    if found is None:
        return
    now_n = found[0]
    if not seen.reloaded:
        seen.low_n = min(seen.low_n, now_n)
        seen.reloaded = now_n > seen.low_n + RELOAD_SHARE * run.peak_n
        return
    seen.top_n = max(seen.top_n, now_n)
    if seen.top_n - now_n > SECOND_SHARE * run.peak_n:
        seen.second_told = True
        core.emit("second_break", Severity.CAUTION, load_net_n=seen.top_n, drop_n=seen.top_n - now_n)


def _zero(core: Core, run: Run, seen: Aftermath) -> None:
    """Zero again: half a second at rest, unloaded, against the tare."""
    if seen.zero_done or seen.stood_s is None or seen.unloaded_s is None:
        return
    assert run.ended_s is not None
    if core.moving or core.stopping is not None:
        seen.stood_s = core.clock_s
    from_s = max(seen.stood_s, seen.unloaded_s - MEAN_S, run.ended_s + BLANKING_S)
    if core.clock_s - from_s < ZERO_S:
        return
    found = mean_since(core, from_s)
    if found is None:
        return
    seen.zero_done = True
    shift, samples = found
    sigma_mean = core.watch.level.sigma_n / sqrt(samples)
    tare_u = run.note.u_n if run.note is not None else 0.0
    flagged = abs(shift) > max(ZERO_SIGMA * sigma_mean, ZERO_SHARE * run.peak_n)
    core.emit(
        "after_zero",
        Severity.CAUTION if flagged else Severity.REMARK,
        shift_n=shift,
        u_n=sqrt(sigma_mean**2 + tare_u**2),
        flagged=flagged,
        rests_seen_from_n=RESTS_SIGMA * sigma_mean if core.setup.frame.cell.position == "supports" else None,
    )
    if core.setup.frame.cell.position == "supports" and shift > RESTS_SIGMA * sigma_mean:
        core.emit("rests_on_fixture", Severity.CAUTION, force_n=shift)


def _may_close(core: Core, run: Run, seen: Aftermath) -> bool:
    assert run.ended_s is not None
    tail_s = max(TAIL_S_MIN, run.plan.method.fracture.tail_s)
    if core.clock_s - run.ended_s < tail_s or core.moving:
        return False
    failed = core.stopping is not None and core.stopping.failed
    waited_s = core.clock_s - max(run.ended_s, seen.stood_s or run.ended_s)
    if failed or waited_s >= max(CLOSE_S_MAX, tail_s):
        return True
    return core.stopping is None and (run.finding is None or seen.zero_done)
