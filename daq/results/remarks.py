"""Remarks: what a reader of the result must know, said from figures that are already there."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from daq.cards.method import MethodCard
from daq.mechanics.deflection import load_point_stiffness_n_mm
from daq.mechanics.rates import force_rate_for_stress_rate_n_s, force_rate_n_s
from daq.results.methodrules import method_remarks
from daq.results.result import Course, Loads
from daq.results.rules import Remark
from daq.results.setup import Setup
from daq.results.story import Story
from daq.results.uncertainty import Uncertainty
from daq.results.zero import AfterZero

RAW_DIFFERENCE_MAX = 0.005  # trade judgement, no source
SAMPLING_MAX = 0.005  # (Ts/2 + tau)/t_break; trade judgement, no source
TOE_SHARE_MAX = 0.25  # of the expected break load
GLITCHES_MAX = 3
SLIPS_MAX = 3
INTERRUPTED_S_MIN = 0.5
LAG_SHARE = 0.3  # declared and recorded lag may differ by so much, and by two sample periods


@dataclass(frozen=True, slots=True)
class Facts:
    """What the remarks are made from."""

    setup: Setup
    story: Story
    loads: Loads
    course: Course
    after_zero: AfterZero | None
    uncertainty: Uncertainty | None
    period_s: float | None
    unusable: int
    onset_width_s: float | None
    aligned: bool


def remarks_of(facts: Facts) -> tuple[Remark, ...]:
    """In a fixed order."""
    parts = (_peak, _lag, _sampling, _course, _zero, _events, _range, _rest)
    own = [remark for part in parts for remark in part(facts)]
    return (*own, *method_remarks(facts.setup, facts.loads, facts.course))


def _peak(facts: Facts) -> Iterator[Remark]:
    story, loads = facts.story, facts.loads
    if story.fracture is None:
        yield Remark(
            "no fracture event", "the run holds no fracture event: no strength, only the highest load"
        )
    elif not story.broken:
        yield Remark(
            "not a clear break", f"the watch called it {story.fracture.verdict!r}: no strength is given"
        )
    peak, raw_n = loads.recovered, loads.raw_n
    if peak is None or raw_n is None or not peak.load_n > 0:
        return
    difference = (raw_n - peak.load_n) / peak.load_n
    if abs(difference) > RAW_DIFFERENCE_MAX:
        yield Remark(
            "raw maximum differs", f"highest raw sample {100 * difference:+.1f} % of the recovered peak"
        )
    if facts.onset_width_s is not None and facts.period_s and facts.onset_width_s > 2.5 * facts.period_s:
        yield Remark("gap at the break", f"no sample for {1e3 * facts.onset_width_s:.0f} ms across the break")


def _lag(facts: Facts) -> Iterator[Remark]:
    declared_s, fall_s = facts.setup.time_constant_s, facts.loads.fall_time_constant_s
    seen = "" if fall_s is None else f"; the recorded fall has a time constant of {1e3 * fall_s:.0f} ms"
    if declared_s is None:
        yield Remark(
            "lag not known", f"no time constant of the force chain is declared: no lag is added{seen}"
        )
    elif fall_s is not None and facts.loads.recovered is not None:
        allowed_s = max(LAG_SHARE * declared_s, 2.0 * (facts.period_s or 0.0))
        if abs(fall_s - declared_s) > allowed_s and facts.story.broken:
            yield Remark("lag disagrees", f"{1e3 * declared_s:.0f} ms declared{seen}")


def _sampling(facts: Facts) -> Iterator[Remark]:
    lasted_s, period_s = facts.course.time_to_break_s, facts.period_s
    if not lasted_s or not period_s:
        return
    share = (period_s / 2.0 + (facts.setup.time_constant_s or 0.0)) / lasted_s
    if share > SAMPLING_MAX:
        yield Remark(
            "sampling and lag", f"half a sample and the lag are {100 * share:.1f} % of the time to break"
        )


def _course(facts: Facts) -> Iterator[Remark]:
    course, method = facts.course, facts.setup.method
    if course.rates is not None and course.rates.interrupted_s >= INTERRUPTED_S_MIN:
        lasted_s = course.rates.interrupted_s
        yield Remark(
            "load history interrupted", f"rate off its median by more than 25 % for {lasted_s:.1f} s"
        )
    if method is None:
        return
    yield from _rate(facts, method)
    band, lasted_s_ = method.time_to_break_s, course.time_to_break_s
    if (
        band is not None
        and lasted_s_ is not None
        and facts.story.broken
        and not band[0] <= lasted_s_ <= band[1]
    ):
        yield Remark("time to break", f"{lasted_s_:.1f} s; the method wants {band[0]:g} to {band[1]:g} s")


def _rate(facts: Facts, method: MethodCard) -> Iterator[Remark]:
    """Against the band the card prints, in its own unit; without one, against the planned rate."""
    rates, per_newton = facts.course.rates, facts.setup.stress_per_newton_mpa
    if rates is None:
        return
    for band, mean, unit in (
        (method.rate.band_n_s, rates.mean_n_s, "N/s"),
        (method.rate.band_mpa_s, rates.mean_n_s * per_newton, "MPa/s"),
    ):
        if band is not None:
            if not band[0] <= mean <= band[1]:
                text = f"mean {mean:.3g} {unit}; the method allows {band[0]:g} to {band[1]:g} {unit}"
                yield Remark("rate out of band", text)
            return
    wanted = planned_rate_n_s(facts.setup, method)
    if wanted is not None:
        off = rates.mean_n_s / wanted - 1.0
        if abs(off) > method.rate.tolerance_percent / 100.0:
            yield Remark("rate out of band", f"mean rate {100 * off:+.0f} % from the method's")


def planned_rate_n_s(setup: Setup, method: MethodCard) -> float | None:
    """Force rate the method asks for; for a crosshead speed: of the expected bar on this frame."""
    rate = method.rate
    if rate.mode == "force":
        return rate.rate_n_s
    if setup.section is None or setup.spans is None:
        return None
    if rate.mode == "stress":
        return (
            None
            if rate.rate_mpa_s is None
            else force_rate_for_stress_rate_n_s(rate.rate_mpa_s, setup.section, setup.spans)
        )
    table = setup.compliance
    if rate.speed_mm_min is None or table is None:
        return None
    rise_mm = float(table.deflection_mm[-1] - table.deflection_mm[0])
    if not rise_mm > 0:
        return None
    frame_n_mm = (table.force_n_max - table.force_n_min) / rise_mm
    bar_n_mm = load_point_stiffness_n_mm(1e3 * method.expected.modulus_gpa, setup.section, setup.spans)
    return force_rate_n_s(rate.speed_mm_min, bar_n_mm, frame_n_mm)


def _zero(facts: Facts) -> Iterator[Remark]:
    tare, after = facts.story.tare, facts.after_zero
    if tare is None:
        yield Remark("no tare", "the run holds no tare note: loads are gross")
    elif tare.overridden:
        yield Remark(
            "tare overridden", f"tared at {tare.tare_n:.4g} N against the rules, with a reason given"
        )
    if after is not None and after.flagged:
        yield Remark(
            "zero has moved",
            f"{after.shift_n:+.3g} N after the break (cause: {after.cause}); "
            f"a load corrected by {after.correction_n:+.3g} N is kept beside",
        )


def _events(facts: Facts) -> Iterator[Remark]:
    story = facts.story
    slips, pop_ins = story.count("slip"), story.count("pop_in")
    unclear, glitches = story.count("partial_drop"), story.count("glitch")
    if pop_ins:
        yield Remark("pop-in", f"{pop_ins} pop-in(s); the first at {facts.loads.first_drop_n or 0.0:.4g} N")
    if slips > SLIPS_MAX:
        yield Remark("slips", f"{slips} slips")
    if unclear:
        yield Remark("unclear drop", f"{unclear} drop(s) that are neither slip nor pop-in for certain")
    if glitches > GLITCHES_MAX:
        yield Remark("glitches", f"{glitches} single samples far off; none of them counts")
    if story.count("fracture") + story.count("second_break") > 1:
        yield Remark("two breaks", "the strength is from the first")
    if story.unloaded is False and story.broken:
        yield Remark("still loaded", "load was left on the bar after the break")


def _range(facts: Facts) -> Iterator[Remark]:
    frame, used_n = facts.setup.frame, facts.loads.used_n
    if frame is None or used_n is None:
        return
    low_n, high_n = frame.cell.verified_min_n, frame.cell.verified_max_n
    if not low_n <= used_n <= high_n:
        yield Remark("outside the verified range", f"{used_n:.4g} N; verified {low_n:g} to {high_n:g} N")


def _rest(facts: Facts) -> Iterator[Remark]:
    toe_n, setup = facts.course.toe_n, facts.setup
    if (
        toe_n is not None
        and setup.method is not None
        and setup.section is not None
        and setup.spans is not None
    ):
        expected_n = setup.method.expected.strength_mpa / setup.stress_per_newton_mpa
        if toe_n > TOE_SHARE_MAX * expected_n:
            yield Remark(
                "uneven seating", f"toe up to {toe_n:.4g} N, more than a quarter of the expected load"
            )
    if facts.uncertainty is not None:
        for part in facts.uncertainty.one_sided:
            yield Remark(
                "fixed rollers", f"{part.name}: true stress may be lower by up to {100 * part.share:.0f} %"
            )
    if facts.aligned:
        yield Remark(
            "displacement aligned", "displacement comes from another link; set beside the load by its times"
        )
    if facts.unusable:
        yield Remark("samples left out", f"{facts.unusable} samples were not numbers or not in time order")
