"""Reduce: one loading's samples, events and cards -> its Result. Pure, deterministic, never raises on a
valid run.

What cannot be computed stays None and is named; nothing is invented. The order of work is written here and
nowhere else: cards, events, samples, break, loads, zero, stress, course, modulus, uncertainty, remarks.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np

from daq.mechanics.edges import chamfer_factor
from daq.mechanics.sections import Rectangle
from daq.results.course import at_mid_span, bending_beside, course_of
from daq.results.loading import Loading, fall_time_constant_s, loading_of
from daq.results.loads import loads_of, peak_of
from daq.results.printed import printed_of
from daq.results.remarks import Facts, remarks_of
from daq.results.result import Loads, Result, Stresses
from daq.results.rules import Remark, rules_of
from daq.results.samples import samples_of
from daq.results.secondlook import explanations
from daq.results.setup import setup_from_cards
from daq.results.stiffness import modulus_of, strain_of
from daq.results.story import story_of
from daq.results.uncertainty import Uncertainty, uncertainty_of
from daq.results.verdict import Evidence, Verdict, judge
from daq.results.zero import AfterZero, after_zero_of
from daq.stream.block import Floats
from daq.stream.rundata import ChannelData, RunData

EVENTS_MAX = 200
EVENT_TEXT_MAX = 200
LEFT_OUT = frozenset({"state", "run_opened", "envelope", "proven", "ticks"})


def reduce(run: RunData) -> Result:
    """Every number of one loading. What overflows or divides by nothing becomes None, without a warning."""
    with np.errstate(all="ignore"):
        return _reduce(run)


def _reduce(run: RunData) -> Result:
    force, loading, missing = _loading(run)
    setup, story, samples = loading.setup, loading.story, loading.samples
    fall_s = fall_time_constant_s(loading)
    peak = peak_of(loading, fall_s)
    loads = loads_of(loading, peak, fall_s)
    bending = bending_beside(run, force, loading)
    course = course_of(loading, peak, bending)
    after = _after_zero(loading, loads)
    uncertainty = _uncertainty(loading, loads)
    facts = Facts(
        setup=setup,
        story=story,
        loads=loads,
        course=course,
        after_zero=after,
        uncertainty=uncertainty,
        period_s=_finite(samples.period_s),
        unusable=samples.unusable,
        onset_width_s=None if loading.onset is None else loading.onset.width_s,
        aligned=bending is not None and bending.aligned,
    )
    interrupted = not story.broken if story.interrupted is None else story.interrupted
    break_class = story.closed_verdict if story.fracture is None else story.fracture.verdict
    mid_mm = course.deflection_at_break_mm if at_mid_span(bending, setup) else None
    stresses, remarks = _stresses(loading, loads, after, mid_mm), remarks_of(facts)
    return Result(
        verdict=_verdict(loading, interrupted, break_class, remarks, missing, stresses),
        break_class=break_class,
        interrupted=interrupted,
        reason=story.reason,
        loads=loads,
        stresses=stresses,
        course=course,
        modulus=modulus_of(bending, samples, setup, loading.inside, loading.highest_n),
        tare_n=None if story.tare is None else story.tare.tare_n,
        after_zero=after,
        residual_n=loading.net_n(story.residual_n),
        unloaded=story.unloaded,
        uncertainty=uncertainty,
        samples=samples.count,
        samples_unusable=samples.unusable,
        sample_period_s=_finite(samples.period_s),
        events=_short_events(run),
        missing=missing,
        remarks=remarks,
    )


def _verdict(
    loading: Loading,
    interrupted: bool,
    break_class: str,
    remarks: tuple[Remark, ...],
    missing: tuple[str, ...],
    stresses: Stresses,
) -> Verdict:
    """By the method's rules, from what is known at the close: nobody has looked at the pieces yet."""
    setup, ratio = loading.setup, loading.story.stiffness_ratio
    told = () if ratio is None else explanations(ratio, setup.section, setup.spans)
    evidence = Evidence(
        broken=loading.story.broken,
        interrupted=interrupted,
        reason=loading.story.reason,
        break_class=break_class,
        remarks=remarks,
        missing=missing,
        has_strength=stresses.strength_mpa is not None,
        spans=setup.spans,
        stiffness_ratio=ratio,
        explained=" or ".join(one.text for one in told),
    )
    return judge(evidence, rules_of(setup.method))


def result_mapping(run: RunData) -> dict[str, Any]:
    """What the archivist seals: the result as plain JSON values, and under "trace" the columns to draw."""
    return {**reduce(run).as_json(), "trace": trace_columns(run)}


def trace_columns(run: RunData) -> dict[str, Floats]:
    """The run to draw: stress over strain (or deflection, or time) with net load and time, a row a force
    sample.

    Only what is known: without sizes there is no stress, without displacement no strain. Toe taken off.
    """
    force, loading, _ = _loading(run)
    samples = loading.samples
    per_newton = _finite(loading.setup.stress_per_newton_mpa)
    columns: dict[str, Floats] = {}
    if per_newton is not None:
        columns["stress_mpa"] = samples.load_n * per_newton
    bending = bending_beside(run, force, loading)
    if bending is not None:
        strains = strain_of(bending, loading.setup)
        if strains is not None:
            columns["strain"] = strains
        if bending.role != "strain":
            columns["deflection_mm"] = bending.values
    columns["time_s"] = samples.time_s
    columns["force_net_n"] = samples.load_n
    return columns


def _loading(run: RunData) -> tuple[ChannelData, Loading, tuple[str, ...]]:
    """Cards, events and force samples put together, and what is missing of them."""
    setup, story = setup_from_cards(run.cards), story_of(run.events)
    missing = list(setup.missing)
    force = run.by_role("force")
    if force is None:
        missing.append("no force channel")
        force = _no_channel()
    loading = loading_of(setup, story, samples_of(force, story.tare_n))
    if loading.samples.count == 0:
        missing.append("no usable force samples")
    return force, loading, tuple(missing)


def _no_channel() -> ChannelData:
    nothing = np.empty(0)
    return ChannelData("", "force", "N", np.empty(0, dtype=np.int64), nothing, nothing, nothing)


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _after_zero(loading: Loading, loads: Loads) -> AfterZero | None:
    if loading.samples.count == 0:
        return None
    frame = loading.setup.frame
    return after_zero_of(
        loading.story,
        loading.samples,
        peak_n=loading.highest_n if loads.used_n is None else loads.used_n,
        break_s=loading.end_s if loads.recovered is None else loads.recovered.onset_s,
        clean_n=None if frame is None else frame.cell.zero_balance_n,
    )


def _stresses(loading: Loading, loads: Loads, after: AfterZero | None, mid_mm: float | None) -> Stresses:
    section, chamfer_mm = loading.setup.section, loading.setup.chamfer_mm
    factor = None
    if isinstance(section, Rectangle) and chamfer_mm <= min(section.width_mm, section.thickness_mm) / 2.0:
        factor = chamfer_factor(section, chamfer_mm)
    per_newton = _finite(loading.setup.stress_per_newton_mpa)
    if per_newton is None:
        return Stresses(None, factor, None, None, None)
    strength = None if loads.used_n is None else loads.used_n * per_newton
    corrected = survived = None
    if strength is not None and after is not None:
        corrected = strength + after.correction_n * per_newton
    if not loading.story.broken and loads.screened_n is not None:
        survived = loads.screened_n * per_newton
    return Stresses(
        strength, factor, corrected, survived, per_newton, printed_of(loading.setup, loads.used_n, mid_mm)
    )


def _uncertainty(loading: Loading, loads: Loads) -> Uncertainty | None:
    if loads.used_n is None:
        return None
    tare, peak, declared_s = loading.story.tare, loads.recovered, loading.setup.time_constant_s
    return uncertainty_of(
        loading.setup,
        load_n=loads.used_n,
        u_peak_n=None if peak is None else peak.u_n,
        u_tare_n=None if tare is None else tare.u_n,
        lag_known=declared_s == 0.0 or (declared_s is not None and loads.fall_time_constant_s is not None),
    )


def _short_events(run: RunData) -> tuple[Mapping[str, Any], ...]:
    """Plain fields of the events that say something about the bar or the run."""
    kept = [event for event in run.events if event.get("event") not in LEFT_OUT][:EVENTS_MAX]
    return tuple({key: value for key, value in event.items() if _is_plain(value)} for event in kept)


def _is_plain(value: object) -> bool:
    if isinstance(value, float):
        return math.isfinite(value)
    return (
        value is None
        or isinstance(value, bool | int)
        or (isinstance(value, str) and len(value) <= EVENT_TEXT_MAX)
    )
