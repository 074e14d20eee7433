"""What the watch takes from the cards: columns, rates and rails of a frame; plan and fixture of one run.

Only this module, expected.py and limits.py read cards. Cards of a run arrive as resolved JSON in OpenRun and
are validated here again, strictly: what cannot be proven usable is a line in the list of missing conditions.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from pydantic import ValidationError

from daq.cards.derived import block_column, compliance_for, silence_s, spans_apart, working_limit_n
from daq.cards.frame import Channel, Fixture, FrameCard
from daq.cards.method import MethodCard
from daq.cards.series import Specimen
from daq.watch.expected import Expected, expect
from daq.watch.requests import OpenRun

RUN_KEYS = ("run_id", "series", "specimen", "loading", "operator")


@dataclass(frozen=True, slots=True)
class Proven:
    """What a person has recorded as proven on this frame since its wiring or its cards last changed."""

    polarity: bool
    stop_drill: bool
    cell: bool = True  # no overload since the cell was last checked


@dataclass(frozen=True, slots=True)
class Column:
    """One channel of a block: where it stands and how counts become a value."""

    name: str
    role: str
    source: int
    column: int
    scale: float
    offset: float
    sign: int
    counts_min: float | None
    counts_max: float | None
    step: float  # one count, in the channel's unit; 0 where the device sends fractions

    def value(self, count: float) -> float:
        return self.sign * (count * self.scale + self.offset)


@dataclass(frozen=True, slots=True)
class SourceSetup:
    """One link of the frame."""

    name: str
    rate_hz: float
    silence_s: float


@dataclass(frozen=True, slots=True)
class WatchSetup:
    """The frame as the watch sees it."""

    frame: FrameCard
    sources: tuple[SourceSetup, ...]
    force: Column
    position: Column | None
    others: tuple[Column, ...]
    rails_n: tuple[float, float]

    @property
    def rate_hz(self) -> float:
        return self.sources[self.force.source].rate_hz

    @property
    def capacity_n(self) -> float:
        return self.frame.cell.capacity_n

    @property
    def lag_s(self) -> float:
        """Declared first-order lag of the force chain; 0 where it is not known (said so in `envelope`)."""
        return self.frame.cell.time_constant_s or 0.0

    @property
    def stop_latency_s(self) -> float:
        return self.frame.motion.stop_latency_s if self.frame.motion else 0.15

    @property
    def towards(self) -> int:
        """Sign of the position channel when the crosshead moves towards the specimen."""
        return self.frame.motion.position_sign if self.frame.motion else 1


@dataclass(frozen=True, slots=True)
class RunSetup:
    """One run as planned: cards, fixture, expected numbers."""

    run: Mapping[str, Any]
    method: MethodCard
    specimen: Specimen
    fixture: Fixture
    expected: Expected
    compliance_known: bool
    tare_override_reason: str


def setup_from_card(frame: FrameCard) -> WatchSetup:
    """The watch's view of a frame; a card without exactly one usable force channel is an impossible card."""
    columns = _columns(frame)
    forces = [column for column in columns if column.role == "force"]
    assert forces, "the frame card has no force channel"
    position = next((column for column in columns if column.role == "position"), None)
    others = tuple(c for c in columns if c is not forces[0] and c is not position)
    sources = tuple(SourceSetup(link.name, link.rate_hz, silence_s(link)) for link in frame.links)
    return WatchSetup(frame, sources, forces[0], position, others, _rails(forces[0]))


def _columns(frame: FrameCard) -> list[Column]:
    """Every channel with its place."""
    return [_column(frame, channel, *block_column(frame, channel)) for channel in frame.channels]


def _column(frame: FrameCard, channel: Channel, source: int, column: int) -> Column:
    packets = frame.links[source].packets
    numbers = {field.name: field.number for field in packets.fields} if packets else {}
    fractional = numbers.get(channel.field or channel.name, "float64").startswith("float")
    return Column(
        name=channel.name,
        role=channel.role,
        source=source,
        column=column,
        scale=channel.scale,
        offset=channel.offset,
        sign=channel.sign,
        counts_min=channel.counts_min,
        counts_max=channel.counts_max,
        step=0.0 if fractional else abs(channel.scale),
    )


def _rails(force: Column) -> tuple[float, float]:
    """Force at 1 % of the converter's range inside each rail (row 2); infinite where undeclared."""
    low, high = force.counts_min, force.counts_max
    margin = 0.01 * (high - low) if low is not None and high is not None else 0.0
    ends = [
        float("-inf") * force.sign * (1 if force.scale > 0 else -1)
        if low is None
        else force.value(low + margin),
        float("inf") * force.sign * (1 if force.scale > 0 else -1)
        if high is None
        else force.value(high - margin),
    ]
    return min(ends), max(ends)


def run_setup(setup: WatchSetup, request: OpenRun) -> RunSetup | tuple[str, ...]:
    """The planned run, or everything that is missing for it."""
    try:
        method = MethodCard.model_validate_json(json.dumps(_plain(request.method)))
        specimen = Specimen.model_validate_json(json.dumps(_plain(request.specimen)))
    except ValidationError as error:
        return tuple(f"card of the run: {'.'.join(map(str, e['loc']))}: {e['msg']}" for e in error.errors())
    missing = [f"run has no {key}" for key in RUN_KEYS if not request.run.get(key)]
    fixture = next((f for f in setup.frame.fixtures if f.name == request.fixture), None)
    if fixture is None:
        return (*missing, f"fixture {request.fixture!r} is not on the frame card")
    missing += open_problems(setup, method, specimen, fixture)
    if missing:
        return tuple(missing)
    compliance = compliance_for(setup.frame, fixture.name)
    plan = expect(method, specimen, fixture, compliance, _frame_stiffness(setup))
    missing += capacity_problems(setup, method, fixture, plan) + speed_problems(setup, plan)
    if missing:
        return tuple(missing)
    return RunSetup(
        run=dict(request.run),
        method=method,
        specimen=specimen,
        fixture=fixture,
        expected=plan,
        compliance_known=compliance is not None,
        tare_override_reason=request.tare_override_reason.strip(),
    )


def open_problems(setup: WatchSetup, method: MethodCard, specimen: Specimen, fixture: Fixture) -> list[str]:
    """Why this bar cannot be tried by this method in this fixture."""
    found = [
        f"{key.removesuffix('_mm').replace('_', ' ')}: method {want:g} mm, fixture {have:g} mm"
        for key, (want, have) in spans_apart(method, fixture).items()
    ]
    if not specimen.thickness_mm:
        found.append("the specimen has no thickness reading")
    if method.section == "rectangle" and not specimen.width_mm and method.width_mm is None:
        found.append("the specimen has no width")
    return found + _rate_problems(setup, method)


def _rate_problems(setup: WatchSetup, method: MethodCard) -> list[str]:
    rate, motion = method.rate, setup.frame.motion
    needed = {"crosshead": rate.speed_mm_min, "force": rate.rate_n_s, "stress": rate.rate_mpa_s}[rate.mode]
    found = [] if needed is not None else [f"the method has no rate for mode {rate.mode}"]
    if motion is None:
        return found  # monitor only: the machine's own controls set the rate
    speed = rate.speed_mm_min
    if speed is not None and not motion.speed_mm_min_min <= speed <= motion.speed_mm_min_max:
        found.append(
            f"speed {speed:g} mm/min is outside {motion.speed_mm_min_min:g}..{motion.speed_mm_min_max:g}"
        )
    if rate.mode != "crosshead" and rate.loop == "frame" and motion.force_rate is None:
        found.append("the frame has no force loop of its own (motion.force_rate)")
    return found


def capacity_problems(setup: WatchSetup, method: MethodCard, fixture: Fixture, plan: Expected) -> list[str]:
    """Limits that could not be kept, or a bar that could not be broken inside them."""
    ceiling = working_limit_n(setup.frame, fixture)
    found = []
    if not plan.load_p50_n < ceiling:
        found.append(
            f"expected break load {plan.load_p50_n:.4g} N, but cell and fixture allow {ceiling:.4g} N"
        )
    force_n_max = method.limits.force_n_max
    if force_n_max is not None and not force_n_max <= ceiling:
        found.append(
            f"limits.force_n_max {force_n_max:g} N is above what cell and fixture allow, {ceiling:.4g} N"
        )
    if not setup.rails_n[1] > ceiling:
        found.append(
            f"the converter's rail lies at {setup.rails_n[1]:.4g} N, below the limit of {ceiling:.4g} N"
        )
    return found


def speed_problems(setup: WatchSetup, plan: Expected) -> list[str]:
    """A rate that the drive cannot hold on this very bar; the card check has asked it of a nominal one."""
    motion = setup.frame.motion
    if motion is None or motion.speed_mm_min_min <= plan.speed_mm_min <= motion.speed_mm_min_max:
        return []
    return [
        f"{plan.rate_n_s:.4g} N/s / {plan.stiffness_n_mm:.4g} N/mm x 60 = {plan.speed_mm_min:.4g} mm/min is outside"
        f" {motion.speed_mm_min_min:g}..{motion.speed_mm_min_max:g} mm/min of the drive"
    ]


def _frame_stiffness(setup: WatchSetup) -> float | None:
    """Where no compliance table fits: the stiffness against a blocked fixture, which holds all but the bar."""
    return setup.frame.motion.blocked_stiffness_n_mm if setup.frame.motion else None


def _plain(card: Mapping[str, Any]) -> dict[str, Any]:
    return dict(card)
