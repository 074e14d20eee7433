"""The zero of an open run: collect at rest, judge, accept or refuse, and say what the watch will see.

Rows 17, 19, 20 and 21 of the limits (daq.watch.limits.ROWS has the numbers). Tried again for as long as the run is
open.
"""

from __future__ import annotations

from dataclasses import asdict
from math import isfinite

from daq.stream.block import Floats
from daq.watch.candidate import Rest
from daq.watch.core import Core, Run
from daq.watch.envelope import usable
from daq.watch.fracture import FractureWatch
from daq.watch.hum import HumLine, HumWatch, quiet_amplitudes
from daq.watch.limits import Reaction, Trip
from daq.watch.states import Cause
from daq.watch.tare import CAUTION_SHARE, Collector, TareNote, TareRules, take
from daq.watch.values import Severity

ARM_CAPACITY_SHARE, ARM_LOAD_SHARE, ARM_SIGMA = 0.02, 0.10, 20.0
RATE_OFF_BY = 0.05
STANDING_MM, STANDING_RESOLUTIONS = 0.002, 6.0
LEVEL_BINS = 8
HUM_ROW = 18


def beat(core: Core) -> None:
    """At rest with an open run that has no zero yet."""
    run = core.run
    if run is None or run.ended or run.note is not None or core.stopping is not None:
        return
    if "shield_open" in core.inputs_against():
        core.collector = None
        return
    at_mm = core.travel.at_mm if core.travel is not None else None
    if core.collector is None:
        core.collector = Collector(core.setup.rate_hz)
        core.collector.at_mm = at_mm
        return
    if not core.collector.full:
        return
    if _moved(core, core.collector.at_mm, at_mm):
        _refuse(core, core.collector, ("the crosshead is moving",), core.gross_n)
        return
    _judge(core, run, core.collector)


def _moved(core: Core, before_mm: float | None, now_mm: float | None) -> bool:
    if core.travel is None or before_mm is None or now_mm is None:
        return False
    return abs(now_mm - before_mm) > max(STANDING_MM, STANDING_RESOLUTIONS * core.travel.resolution_mm)


TARE_SAMPLES_MIN = 4  # fewer say nothing of noise and drift


def _judge(core: Core, run: Run, collector: Collector) -> None:
    rules = TareRules(
        capacity_n=core.setup.capacity_n,
        zero_n=core.setup.frame.cell.zero_balance_n,
        quiet_n=core.setup.frame.cell.noise_quiet_n,
        step_n=core.setup.force.step,
        previous_n=core.last_tare_n,
        run_s=run.plan.expected.time_to_break_s,
    )
    times_s, gross_n = collector.cut()
    if len(times_s) < TARE_SAMPLES_MIN:
        told = f"{len(times_s)} samples came while at rest, {TARE_SAMPLES_MIN} are needed"
        _refuse(core, collector, (told,), float(gross_n[-1]) if len(gross_n) else float("nan"))
        return
    taken = take(times_s, gross_n, rules)
    override = "" if taken.final else run.plan.tare_override_reason
    if taken.drifting and not taken.final and not override and collector.look_longer():
        return
    if taken.reasons and not override:
        _refuse(core, collector, taken.reasons, taken.note.tare_n)
        return
    _accept(core, run, taken.note, float(times_s[0]))
    newest = slice(-core.watch.level.bin_samples * LEVEL_BINS, None)
    net_n = (gross_n[newest] - taken.note.tare_n).tolist()
    core.watch.level.begin_anew(times_s[newest].tolist(), net_n, 0.0)
    run.tare_overridden = bool(override and taken.reasons)
    _tell(core, taken.note, rules, override if taken.reasons else "")
    core.go(Cause.TARED)
    _watch_hum(core, run, gross_n)
    _say_envelope(core, run, taken.note)
    _say_limits(core)
    core.emit("ready")


def _refuse(core: Core, collector: Collector, reasons: tuple[str, ...], gross_n: float) -> None:
    """Said once for each kind of refusal."""
    kinds = tuple(reason.split(" ")[0] for reason in reasons)
    if collector.told != kinds:
        collector.told = kinds
        gross = gross_n if isfinite(gross_n) else None
        core.emit("tare_refused", Severity.CAUTION, reasons=reasons, gross_n=gross)
    collector.begin_again()


def _accept(core: Core, run: Run, note: TareNote, begun_s: float) -> None:
    run.note, core.collector = note, None
    core.tare_n, core.sigma_n, core.frozen_samples = note.tare_n, note.sigma_n, note.frozen_samples
    if core.travel is not None:
        core.travel.learn_at_rest(begun_s)
    settings = run.plan.method.fracture
    core.watch = FractureWatch(core.setup.rate_hz, note.sigma_n, settings, core.setup.lag_s)
    core.watch.rest = Rest(note.low_n - note.tare_n, note.high_n - note.tare_n, note.dull, note.step_n)
    core.limits_for_run()


def _watch_hum(core: Core, run: Run, gross_n: Floats) -> None:
    """From here on; what is too strong at rest is told now."""
    level = core.watch.level
    quiet_n = quiet_amplitudes(core.setup.rate_hz, gross_n)
    run.hum = HumWatch(
        core.setup.rate_hz,
        level.bin_samples,
        sigma_n=core.sigma_n,
        load_p50_n=run.plan.expected.load_p50_n,
        quiet_n=quiet_n,
    )
    for line in run.hum.at_rest(quiet_n):
        tell_hum(core, run, line)


def tell_hum(core: Core, run: Run, line: HumLine) -> None:
    """Row 18: each line once a run."""
    what = f"hum of {line.true_hz:g} Hz"
    if what in run.told:
        return
    run.told.add(what)
    core.tell_limit(
        Trip(HUM_ROW, line.amplitude_n, line.limit_n, "N", Reaction.CAUTION), what, Severity.CAUTION
    )
    core.emit(
        "hum",
        Severity.CAUTION,
        true_hz=line.true_hz,
        seen_hz=line.seen_hz,
        amplitude_n=line.amplitude_n,
    )


def _tell(core: Core, note: TareNote, rules: TareRules, overridden: str) -> None:
    core.emit(
        "tared",
        Severity.CAUTION if overridden else Severity.REMARK,
        tare_n=note.tare_n,
        sigma_n=note.sigma_n,
        drift_n_min=note.drift_n_min,
        u_n=note.u_n,
        samples=note.samples,
        rate_hz=note.rate_hz,
        overridden=overridden,
    )
    declared = core.setup.rate_hz
    if abs(note.rate_hz - declared) > RATE_OFF_BY * declared:
        core.emit("sample_rate_off", Severity.CAUTION, declared_hz=declared, measured_hz=note.rate_hz)
    references = [rules.zero_n] + ([rules.previous_n] if rules.previous_n is not None else [])
    shift = max((note.tare_n - reference for reference in references), key=abs)
    verify = core.overloaded and abs(shift) > rules.capacity_n / 1000.0
    if abs(shift) > CAUTION_SHARE * rules.capacity_n or verify:
        core.emit("zero_moved", Severity.CAUTION, shift_n=shift, after_overload=core.overloaded)


def arm_n(core: Core, run: Run) -> float:
    """The reference arms at max(2 % C, 20 sigma). On a big cell a weak bar would then break unwatched, so the
    first term is also held to 10 % of the expected load."""
    load_n = run.plan.expected.load_p50_n
    low = min(ARM_CAPACITY_SHARE * core.setup.capacity_n, ARM_LOAD_SHARE * load_n)
    return max(low, ARM_SIGMA * core.sigma_n)


def _say_envelope(core: Core, run: Run, note: TareNote) -> None:
    plan = run.plan.expected
    found = usable(
        peak_n=plan.load_p50_n,
        sigma_n=max(note.sigma_n, 1e-9),
        rate_hz=core.setup.rate_hz,
        time_to_break_s=plan.time_to_break_s,
        lag_s=core.setup.frame.cell.time_constant_s,
        arm_n=arm_n(core, run),
    )
    core.emit(
        "envelope",
        Severity.REMARK if found.detects else Severity.CAUTION,
        detects=found.detects,
        reasons=found.reasons,
        budget=found.budget,
        gate=found.gate.value,
    )


def _say_limits(core: Core) -> None:
    """The limits as frozen for this run, for the record."""
    values = {key: value if isfinite(value) else None for key, value in asdict(core.limits).items()}
    core.emit("limits", **values)
