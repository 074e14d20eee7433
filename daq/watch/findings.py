"""What follows from a finding of the fracture watch: a stop, a verdict, an event, or an operator's unloading.

The fracture watch knows force only. Before a fall is believed, the crosshead is asked whether it went back
far enough to have taken the load off itself.
"""

from __future__ import annotations

from collections.abc import Mapping

from daq.watch import signal
from daq.watch.core import Core, Run
from daq.watch.drops import Drop, slope_between, stiffness_ratio, tell
from daq.watch.drops import window_s as drop_window_s
from daq.watch.fracture import ENDS_RUN, Finding, Kind
from daq.watch.limits import Reaction, Trip
from daq.watch.states import Cause
from daq.watch.values import Json, Severity, Verdict

BLANKING_S = 0.1
EXPLAINED_SHARE = 0.5
BACK_LOOK_S = 0.2
BACK_RESOLUTIONS = 4.0
MANY = {"slip": 3, "glitch": 3}

VERDICTS: Mapping[Kind, Verdict] = {
    Kind.SUDDEN: Verdict.SUDDEN_BREAK,
    Kind.GRADUAL: Verdict.GRADUAL_FAILURE,
    Kind.LASTING: Verdict.UNCLEAR,
}


def found(core: Core, finding: Finding) -> None:
    """Obey one finding. After the run has ended only a break still counts: the bar may break while it stops."""
    run = core.run
    if run is None or run.finding is not None or (run.ended and finding.kind not in ENDS_RUN):
        return
    if finding.kind is Kind.GLITCH:
        core.emit("glitch", off_n=finding.drop, samples=finding.samples, onset_s=finding.onset_s)
        count(core, run, "glitch")
        return
    if run.flat is not None:
        run.flat.restart()
    if finding.kind is Kind.LOST:
        signal.lost(core, f"the force is {finding.by} after a change")
    elif not run.ended and _explained(core, run, finding):
        load_taken_off(core, run)
    elif finding.kind is Kind.PARTIAL:
        _partial(core, run, finding)
    elif finding.kind is Kind.REBASELINE:
        if finding.by == "falling":  # a kink upward is silent: every hard toe has one
            core.emit("rebaseline", onset_s=finding.onset_s, by=finding.by, step_n=-finding.drop)
    else:
        _broke(core, run, finding)


def _explained(core: Core, run: Run, finding: Finding) -> bool:
    """Did the crosshead go back far enough to have taken off half of what the force lost?"""
    if core.travel is None or finding.drop <= 0:
        return False
    back_mm = core.travel.back_from_top_mm(finding.onset_s - BACK_LOOK_S)
    if not back_mm > BACK_RESOLUTIONS * core.travel.resolution_mm:
        return False
    return back_mm * run.plan.expected.stiffness_n_mm >= EXPLAINED_SHARE * finding.drop


def load_taken_off(core: Core, run: Run) -> None:
    """The crosshead goes the other way: the operator, or a drive wired wrongly. Stop, and no break."""
    what = "crosshead moves away from the specimen"
    back_mm = core.travel.back_mm if core.travel is not None else 0.0
    core.watch.watch(False)
    core.stop(what)
    core.go(Cause.LOAD_TAKEN_OFF, what)
    core.tell_limit(Trip(14, -back_mm, 0.0, "mm", Reaction.STOP), what, Severity.STOP)
    core.end_run(Verdict.UNLOADED, what)


def _broke(core: Core, run: Run, finding: Finding) -> None:
    verdict = VERDICTS[finding.kind]
    watched = core.watched
    core.stop(verdict.value)
    if watched:
        core.go(Cause.BROKE, verdict.value)
    core.blank_until_s = finding.time_s + BLANKING_S
    if run.drop is not None:
        tell_drop(core, run, seen=False)
    run.finding, run.peak_n = finding, max(finding.forecast, 0.0)
    severity = Severity.STOP if verdict is Verdict.UNCLEAR else Severity.REMARK
    core.emit("fracture", severity, **_fields(core, finding, verdict))
    if run.ended:
        run.restart_tail(verdict, core.clock_s)
    core.end_run(verdict, verdict.value)


def _fields(core: Core, finding: Finding, verdict: Verdict) -> dict[str, Json]:
    tare_n = core.tare_n
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
        "lag_known": core.setup.frame.cell.time_constant_s is not None,
        "delay_s": finding.time_s - finding.onset_s,
    }


# --- partial drops


def _partial(core: Core, run: Run, finding: Finding) -> None:
    if run.drop is not None:
        tell_drop(core, run, seen=False)
    level, rate_hz = core.watch.level, core.setup.rate_hz
    slope = max(finding.slope_n_s, 1e-9)
    window_s = drop_window_s(rate_hz, finding.sigma_n, slope)
    from_s = max(finding.last_good_s - window_s, run.smooth_since_s)
    before = None
    if finding.last_good_s - from_s > 0.5 * window_s:
        before = slope_between(level.history, from_s, finding.last_good_s)
    if run.seating is not None:
        run.seating.restart()
    run.smooth_since_s = finding.time_s
    run.drop = Drop(
        onset_s=finding.onset_s,
        settled_s=finding.time_s,
        load_n=finding.forecast,
        drop_n=finding.drop,
        slope_before_n_s=before,
        until_s=finding.time_s + window_s,
    )


def tell_drop(core: Core, run: Run, *, seen: bool) -> None:
    """What the waiting partial drop was. seen: the window after it is complete."""
    drop = run.drop
    assert drop is not None
    run.drop = None
    after = slope_between(core.watch.level.history, drop.settled_s, drop.until_s) if seen else None
    ratio = None
    if after is not None and drop.slope_before_n_s is not None:
        crosshead = run.plan.method.rate.mode == "crosshead"
        speed = core.set_speed_mm_s if crosshead and core.set_speed_mm_s > 0 else None
        machine = run.plan.expected.stiffness_machine_n_mm
        ratio = stiffness_ratio(drop.slope_before_n_s, after, speed, machine)
    told = tell(drop, after, ratio)
    core.emit(
        told.kind,
        Severity.CAUTION if told.kind == "pop_in" else Severity.REMARK,
        load_n=drop.load_n + core.tare_n,
        drop_n=drop.drop_n,
        onset_s=drop.onset_s,
        ratio=told.ratio,
        why=told.why,
    )
    count(core, run, told.kind)


def count(core: Core, run: Run, kind: str) -> None:
    """Row 22: more slips or glitches than a good loading has."""
    run.pieces[kind] += 1
    if run.pieces[kind] == MANY.get(kind, -2) + 1:
        core.emit("events_many", Severity.CAUTION, kind=kind, count=run.pieces[kind])
