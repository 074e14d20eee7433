"""Does a method fit a frame and the fitted fixture? Refuses what cannot work; planning is not done here."""

from __future__ import annotations

from collections.abc import Iterator

from daq.cards.derived import (
    channels_with,
    fixture_by_name,
    median_load_n,
    planned_speed,
    position_channel,
    spans_apart,
    spans_of,
    working_limit_n,
)
from daq.cards.faults import Fault
from daq.cards.frame import Fixture, FrameCard, Motion
from daq.cards.method import MethodCard


def fit_faults(frame: FrameCard, method: MethodCard, fixture_name: str) -> Iterator[Fault]:
    """Every reason why this method cannot be run on this frame with this fixture."""
    try:
        fixture = fixture_by_name(frame, fixture_name)
    except KeyError:
        do = "choose one of " + ", ".join(fixture.name for fixture in frame.fixtures)
        yield Fault(("fixture",), f"the name of a fixture of frame {frame.name}", do, repr(fixture_name))
        return
    yield from _span_faults(frame, method, fixture)
    yield from _force_faults(frame, method, fixture)
    yield from _sensor_faults(frame, method)
    if frame.motion is not None:
        yield from _motion_faults(frame, method, frame.motion)
        yield from _planned_speed_faults(frame, method, fixture, frame.motion)


def _span_faults(frame: FrameCard, method: MethodCard, fixture: Fixture) -> Iterator[Fault]:
    wanted_geometry = "3-point" if method.geometry == "3-point" else "4-point"
    if fixture.geometry != wanted_geometry:
        allowed = f"a {fixture.geometry} method, because fixture {fixture.name} is fitted"
        yield Fault(("geometry",), allowed, _other_fixture(frame, method))
        return
    for key, (_, have) in spans_apart(method, fixture).items():
        allowed = f"{have:g} mm within 1 %, the span of the fitted fixture {fixture.name}"
        yield Fault((key,), allowed, _other_fixture(frame, method))


def fitting_fixtures(frame: FrameCard, method: MethodCard) -> tuple[str, ...]:
    """Names of the frame's fixtures that have the method's geometry and spans."""
    three = method.geometry == "3-point"
    return tuple(
        fixture.name
        for fixture in frame.fixtures
        if (fixture.geometry == "3-point") == three and not spans_apart(method, fixture)
    )


def _other_fixture(frame: FrameCard, method: MethodCard) -> str:
    names = fitting_fixtures(frame, method)
    if names:
        return "fit the fixture " + " or ".join(names) + ", or choose another method"
    return f"choose another method; no fixture of frame {frame.name} has these spans"


def _force_faults(frame: FrameCard, method: MethodCard, fixture: Fixture) -> Iterator[Fault]:
    limit_n = working_limit_n(frame, fixture)
    part = (
        "the cell's capacity"
        if frame.cell.capacity_n <= fixture.rating_n
        else f"the rating of {fixture.name}"
    )
    asked_n = method.limits.force_n_max
    if asked_n is not None and asked_n > limit_n:
        allowed = f"at most {limit_n:g} N, 90 % of {part}"
        yield Fault(("limits", "force_n_max"), allowed, "lower it, or leave it out")
    median_n = median_load_n(method, spans_of(fixture))
    if median_n >= limit_n:
        allowed = f"a median break load below {limit_n:g} N, 90 % of {part} (expected {median_n:.4g} N)"
        yield Fault(
            ("expected", "strength_mpa"), allowed, "use a larger cell or fixture, or correct the card"
        )


def _sensor_faults(frame: FrameCard, method: MethodCard) -> Iterator[Fault]:
    role = {"deflection": "deflection", "crosshead": "position", "strain": "strain"}.get(method.modulus)
    roles = {channel.role for channel in frame.channels}
    if role is not None and role not in roles:
        allowed = f"'no' on frame {frame.name}, which has no channel of role '{role}'"
        yield Fault(("modulus",), allowed, "choose a sensor that the frame has")


def _motion_faults(frame: FrameCard, method: MethodCard, motion: Motion) -> Iterator[Fault]:
    low, high = motion.speed_mm_min_min, motion.speed_mm_min_max
    speeds = {
        ("rate", "speed_mm_min"): method.rate.speed_mm_min,
        ("preload", "seating_mm_min"): method.preload.seating_mm_min,
    }
    for path, speed in speeds.items():
        if speed is not None and not low <= speed <= high:
            allowed = f"from {low:g} to {high:g} mm/min, the speed range of frame {frame.name}"
            yield Fault(path, allowed, "choose a speed in this range; mm/s times 60 is mm/min")
    if method.rate.mode != "crosshead" and method.rate.loop == "frame" and motion.force_rate is None:
        allowed = f"'midspan' on frame {frame.name}, whose card has no [motion.force_rate]"
        yield Fault(
            ("rate", "loop"), allowed, "set loop = 'midspan' and rate.speed_mm_min", f"'{method.rate.loop}'"
        )
    yield from _travel_faults(frame, method, motion)


def _planned_speed_faults(
    frame: FrameCard, method: MethodCard, fixture: Fixture, motion: Motion
) -> Iterator[Fault]:
    """A force or stress rate that the drive in force could not hold, with the arithmetic."""
    planned, low, high = (
        planned_speed(frame, method, fixture),
        motion.speed_mm_min_min,
        motion.speed_mm_min_max,
    )
    if planned is None or low <= planned.mm_min <= high:
        return
    key = "rate_n_s" if method.rate.mode == "force" else "rate_mpa_s"
    sums = (
        f"{planned.rate_n_s:.4g} N/s / {planned.stiffness_n_mm:.4g} N/mm x 60 = {planned.mm_min:.4g} mm/min"
    )
    allowed = (
        f"a rate within {low:g} to {high:g} mm/min of frame {frame.name} ({sums}, bar and frame in series)"
    )
    yield Fault(("rate", key), allowed, "choose another rate; check span, dimensions and modulus_gpa")


def _travel_faults(frame: FrameCard, method: MethodCard, motion: Motion) -> Iterator[Fault]:
    travel_mm = motion.travel_mm_max - motion.travel_mm_min
    asked_mm = method.limits.travel_mm_max
    if asked_mm is not None and asked_mm > travel_mm:
        allowed = f"at most {travel_mm:g} mm, the travel of frame {frame.name}"
        yield Fault(("limits", "travel_mm_max"), allowed, "lower it, or leave it out")
    sensors = position_channel(frame) is not None or channels_with(frame, "deflection")
    if not sensors and not method.limits.force_only_allowed:
        allowed = f"true on frame {frame.name}, which has no channel of role 'position' or 'deflection'"
        yield Fault(("limits", "force_only_allowed"), allowed, "decide it in the method card", "false")
