"""Cautions: what is true, allowed, and ought to be known before a series starts. Nothing here blocks."""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterator

from daq.cards.derived import (
    SectionSize,
    Spans,
    compliance_for,
    fixture_by_name,
    geometry_of,
    median_load_n,
    nominal_section,
    position_channel,
    silence_s,
    spans_of,
)
from daq.cards.frame import Fixture, FrameCard, Motion
from daq.cards.method import MethodCard

# Elementary flexure is trusted between these (common practice, no source).
SLENDERNESS_MIN, SLENDERNESS_MAX = 10.0, 60.0
WEIBULL_BARS_MIN, MEAN_BARS_MIN = 10, 5
KEYS_SHOWN_MAX = 5  # a card of the library has some twenty; `midspan methods show` tells them all


def cautions(
    frame: FrameCard,
    method: MethodCard | None = None,
    *,
    fixture: str | None = None,
    bars: int | None = None,
    today: dt.date,
) -> tuple[str, ...]:
    """One line for each; the day is an argument."""
    found = list(_frame_cautions(frame, today))
    if method is not None:
        found.extend(_method_cautions(frame, method, fixture))
    if bars is not None and bars < WEIBULL_BARS_MIN:
        what = "no Weibull statistics" if bars < MEAN_BARS_MIN else "a wide Weibull modulus"
        found.append(f"{bars} bars: {what}; {WEIBULL_BARS_MIN} bars or more are usual")
    return tuple(found)


def approach_limit_mm_min(frame: FrameCard, motion: Motion) -> float:
    """Fastest approach that stays under half of the capacity when it meets a blocked fixture.

    v = (0.5 C - F_touch) / (k_blocked t_stop), F_touch = max(10 sigma, 0.3 % C, 0.5 N): first principles.
    """
    capacity_n = frame.cell.capacity_n
    touch_n = max(10.0 * (frame.cell.noise_quiet_n or 0.0), 0.003 * capacity_n, 0.5)
    speed_mm_s = (0.5 * capacity_n - touch_n) / (motion.blocked_stiffness_n_mm * motion.stop_latency_s)
    return max(0.0, 60.0 * speed_mm_s)


def _frame_cautions(frame: FrameCard, today: dt.date) -> Iterator[str]:
    cell = frame.cell
    if cell.verified_due is None:
        yield f"cell {cell.serial}: no verified_due in the card, so an overdue verification is not seen"
    elif cell.verified_due < today:
        days = (today - cell.verified_due).days
        yield (
            f"cell {cell.serial}: verification overdue since {cell.verified_due.isoformat()} ({days} days); "
            "reports are marked"
        )
    if cell.verified_on is not None and cell.verified_on > today:
        day = cell.verified_on.isoformat()
        yield f"cell {cell.serial}: verified_on {day} lies in the future; check card and clock"
    if cell.time_constant_s is None:
        yield f"cell {cell.serial}: lag of the force chain not known, so peaks are not corrected for it"
    if cell.noise_quiet_n is None:
        yield f"cell {cell.serial}: no quiet record, so noise is judged without a reference"
    if position_channel(frame) is None:
        yield f"frame {frame.name}: no position channel, so a stop cannot be verified"
    for link in frame.links:
        usual_s = silence_s(link.model_copy(update={"silence_s": None}))
        if not frame.simulated and silence_s(link) > usual_s:
            yield (
                f"link {link.name}: a lost signal stops the machine only after {silence_s(link):g} s "
                f"(usual: {usual_s:g} s); leave silence_s out on a real frame"
            )
    names = {status.name for status in frame.inputs}
    for name, words in (("shield_open", "shield"), ("emergency_stop", "emergency stop")):
        if name not in names:
            yield f"frame {frame.name}: the {words} is not wired to midspan and is not seen"
    if frame.motion is None:
        yield f"frame {frame.name}: monitor only, midspan cannot stop this machine"
    else:
        yield from _motion_cautions(frame, frame.motion)


def _motion_cautions(frame: FrameCard, motion: Motion) -> Iterator[str]:
    if motion.keep_alive is None:
        yield f"frame {frame.name}: no keep-alive, this machine does not stop if the computer dies"
    limit = approach_limit_mm_min(frame, motion)
    if motion.approach_mm_min > limit:
        yield (
            f"frame {frame.name}: approach of {motion.approach_mm_min:g} mm/min is clamped to "
            f"{limit:.3g} mm/min, so that a blocked fixture cannot pass half of the capacity"
        )


def _method_cautions(frame: FrameCard, method: MethodCard, fixture: str | None) -> Iterator[str]:
    spans, fitted = geometry_of(method), fixture or ""
    if any(item.name == fitted for item in frame.fixtures):
        spans = spans_of(fixture_by_name(frame, fitted))
        yield from _fixture_cautions(method, fixture_by_name(frame, fitted))
    size = nominal_section(method)
    yield from _slenderness_cautions(method, spans, size)
    load_n = median_load_n(method, spans)
    if load_n < frame.cell.verified_min_n:
        low_n = frame.cell.verified_min_n
        yield f"method {method.name}: median break load {load_n:.3g} N is below the verified {low_n:g} N"
    if method.modulus == "crosshead" and compliance_for(frame, fitted) is None:
        yield f"method {method.name}: no compliance table for fixture {fitted or '?'}, so no modulus is shown"
    unchecked = [clause.key for clause in method.clauses if clause.mark not in ("checked", "own choice")]
    if unchecked:
        more = len(unchecked) - KEYS_SHOWN_MAX
        keys = ", ".join(unchecked[:KEYS_SHOWN_MAX]) + (f" and {more} more" if more > 0 else "")
        yield f"method {method.name}: values not checked against the standard: {keys}"


def _fixture_cautions(method: MethodCard, fixture: Fixture) -> Iterator[str]:
    needs, diameter_mm = method.needs, fixture.roller_diameter_mm
    window = needs.roller_diameter_mm
    if window is not None and not window[0] <= diameter_mm <= window[1]:
        yield (
            f"method {method.name}: rollers of fixture {fixture.name} are {diameter_mm:g} mm, "
            f"the method wants {window[0]:g} to {window[1]:g} mm"
        )
    if needs.rollers_free and fixture.rollers == "fixed":
        yield f"method {method.name}: rollers of fixture {fixture.name} are fixed, the method wants them free"


def _slenderness_cautions(method: MethodCard, spans: Spans, size: SectionSize) -> Iterator[str]:
    slenderness = spans.support_mm / size.thickness_mm
    if not SLENDERNESS_MIN <= slenderness <= SLENDERNESS_MAX:
        yield (
            f"method {method.name}: span over thickness is {slenderness:.3g}, outside "
            f"{SLENDERNESS_MIN:g} to {SLENDERNESS_MAX:g}: elementary flexure is less exact"
        )
