"""Setup: what one loading was made with, from its cards, in the terms of the mechanics. Says what is missing.

A card that cannot be read (an old record, a damaged one) never stops a reduction: it is named in `missing`,
and the numbers that need it stay out.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, TypeVar

import numpy as np
from pydantic import ValidationError

from daq.cards.base import Card
from daq.cards.derived import compliance_for, fixture_by_name, geometry_of, section_of, spans_of
from daq.cards.frame import Fixture, FrameCard
from daq.cards.method import MethodCard
from daq.cards.series import Specimen
from daq.mechanics.compliance import ComplianceTable
from daq.mechanics.sections import Circle, Rectangle, Section, Spans, Tube
from daq.mechanics.stress import stress_per_newton_mpa

AnyCard = TypeVar("AnyCard", bound=Card)


@dataclass(frozen=True, slots=True)
class Setup:
    """None: not known. spans come from the fixture as measured; only without a known fixture from the
    method.
    """

    frame: FrameCard | None
    method: MethodCard | None
    specimen: Specimen | None
    fixture: Fixture | None
    spans: Spans | None
    section: Section | None
    chamfer_mm: float
    compliance: ComplianceTable | None
    missing: tuple[str, ...] = ()

    @property
    def stress_per_newton_mpa(self) -> float:
        """NaN where section or spans are not known."""
        if self.section is None or self.spans is None:
            return float("nan")
        return stress_per_newton_mpa(self.section, self.spans)

    @property
    def time_constant_s(self) -> float | None:
        """Declared lag of the force chain; None: not known."""
        return None if self.frame is None else self.frame.cell.time_constant_s

    @property
    def position_sign(self) -> int:
        """Of the position channel when moving towards the bar."""
        motion = None if self.frame is None else self.frame.motion
        return 1 if motion is None else motion.position_sign


def setup_from_cards(cards: Mapping[str, Any]) -> Setup:
    """From the JSON cards of a record: frame, method, specimen, run (which names the fixture)."""
    missing: list[str] = []
    frame = _read(FrameCard, cards.get("frame"), "frame card", missing)
    method = _read(MethodCard, cards.get("method"), "method card", missing)
    specimen = _read(Specimen, cards.get("specimen"), "specimen's sizes", missing)
    run = cards.get("run")
    name = run.get("fixture") if isinstance(run, Mapping) else None
    return setup_of(frame, method, specimen, name if isinstance(name, str) else "", tuple(missing))


def setup_of(
    frame: FrameCard | None,
    method: MethodCard | None,
    specimen: Specimen | None,
    fixture_name: str,
    missing: tuple[str, ...] = (),
) -> Setup:
    """From cards that were loaded."""
    said = list(missing)
    fixture = _fixture(frame, fixture_name, said)
    spans = _spans(fixture, method, said)
    section = None if method is None or specimen is None else _section(specimen, method, said)
    chamfer_mm = 0.0
    if method is not None:
        own = None if specimen is None else specimen.chamfer_mm
        chamfer_mm = method.chamfer_mm if own is None else own
    table = None if frame is None or fixture is None else _compliance(frame, fixture.name)
    return Setup(frame, method, specimen, fixture, spans, section, chamfer_mm, table, tuple(said))


def _read(kind: type[AnyCard], found: object, what: str, missing: list[str]) -> AnyCard | None:
    if not isinstance(found, Mapping) or not found:
        missing.append(f"no {what}")
        return None
    try:
        return kind.model_validate(found, strict=False)
    except ValidationError as error:
        first = error.errors()[0]
        place = ".".join(str(part) for part in first["loc"])
        missing.append(f"{what} cannot be read: {place}: {first['msg']}")
        return None


def _fixture(frame: FrameCard | None, name: str, missing: list[str]) -> Fixture | None:
    if frame is None:
        return None
    try:
        return fixture_by_name(frame, name)
    except KeyError:
        missing.append(f"fixture {name!r} is not on the frame card: nominal spans of the method are used")
        return None


def _spans(fixture: Fixture | None, method: MethodCard | None, missing: list[str]) -> Spans | None:
    if fixture is not None:
        spans = spans_of(fixture)
    elif method is not None:
        spans = geometry_of(method)
    else:
        return None
    if not 0 <= spans.load_mm < spans.support_mm:
        missing.append(f"spans {spans.support_mm} and {spans.load_mm} mm are impossible")
        return None
    return Spans(spans.support_mm, spans.load_mm)


def _section(specimen: Specimen, method: MethodCard, missing: list[str]) -> Section | None:
    if method.section == "rectangle" and not specimen.width_mm:
        missing.append("no width of the bar")
        return None
    size = section_of(specimen, method)
    if method.section == "rectangle":
        return Rectangle(size.width_mm, size.thickness_mm)
    if method.section == "circle":
        return Circle(size.thickness_mm)
    if not size.inner_diameter_mm < size.thickness_mm:
        missing.append("inner diameter of the tube is not below its diameter")
        return None
    return Tube(size.thickness_mm, size.inner_diameter_mm)


def _compliance(frame: FrameCard, fixture_name: str) -> ComplianceTable | None:
    card = compliance_for(frame, fixture_name)
    if card is None:
        return None
    force_n = np.array([point.force_n for point in card.points], dtype=np.float64)
    deflection_mm = np.array([point.deflection_um * 1e-3 for point in card.points], dtype=np.float64)
    if np.any(np.diff(force_n) <= 0) or np.any(np.diff(deflection_mm) < 0):
        return None
    return ComplianceTable(force_n, deflection_mm)
