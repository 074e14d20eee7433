"""The method card: how a kind of bar is tested and judged. Clause values stay marked until a person signs them."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from daq.cards.base import Card
from daq.cards.frame import NotNegative, Positive

Geometry = Literal["3-point", "4-point-quarter", "4-point-third", "4-point"]
Section = Literal["rectangle", "circle", "tube"]


class Clause(Card):
    """Where a value comes from."""

    key: str
    standard: str
    edition: str = ""
    clause: str = ""
    mark: Literal["confirmed", "from memory", "unchecked", "checked"] = "unchecked"
    checked_by: str = ""
    checked_on: str = ""


class Rate(Card):
    """What is held constant while loading, and who closes the loop for force and stress rates."""

    mode: Literal["crosshead", "force", "stress"]
    speed_mm_min: Positive | None = None             # crosshead, and first speed of a loop closed by midspan
    rate_n_s: Positive | None = None
    rate_mpa_s: Positive | None = None
    loop: Literal["frame", "midspan"] = "frame"
    tolerance_percent: Positive = 20.0


class Expected(Card):
    """What the bars are expected to do; the plan and the limits start from this."""

    strength_mpa: Positive
    weibull_modulus: Annotated[float, Field(ge=1, le=100)] = 10.0
    modulus_gpa: Annotated[float, Field(gt=0.1, le=1000)]
    poisson_ratio: Annotated[float, Field(ge=0, lt=0.5)] = 0.25


class Preload(Card):
    seat_percent: Annotated[float, Field(gt=0, le=10)] = 2.0       # of the median expected break load
    hold_s: NotNegative = 0.0
    seating_mm_min: Positive | None = None                        # default: the test rate


class Limits(Card):
    """Limits that belong to the method. Cell and fixture limits come from the frame card and always apply."""

    force_n_max: Positive | None = None
    travel_mm_max: Positive | None = None            # from contact
    run_s_max: Positive = 600.0
    force_only_allowed: bool = False                 # go on without the displacement sensor


class FractureSettings(Card):
    """job.md 3.5; every number may be tuned per frame."""

    threshold_sigma: Positive = 6.0
    threshold_percent: Annotated[float, Field(gt=0, le=20)] = 2.0
    break_percent: Annotated[float, Field(gt=0, lt=100)] = 50.0
    lasting_percent: Annotated[float, Field(gt=0, le=20)] = 20.0
    confirm_s: Positive = 0.010
    tail_s: Annotated[float, Field(ge=0.5, le=10)] = 0.5


class MethodCard(Card):
    """One way of testing one kind of bar."""

    card: Literal["method"]
    name: str
    title: str = ""
    geometry: Geometry
    section: Section
    support_span_mm: Positive
    load_span_mm: NotNegative = 0.0
    width_mm: Positive | None = None                 # nominal, rectangle
    thickness_mm: Positive | None = None             # nominal, in the loading direction
    diameter_mm: Positive | None = None              # nominal, circle and tube
    inner_diameter_mm: NotNegative = 0.0
    dimension_tolerance_percent: Positive = 10.0
    readings: Annotated[int, Field(ge=1, le=10)] = 3
    dimension_u_mm: NotNegative = 0.005              # half-width, rectangular, of one gauge
    chamfer_mm: NotNegative = 0.0
    rate: Rate
    expected: Expected
    preload: Preload = Preload()
    limits: Limits = Limits()
    fracture: FractureSettings = FractureSettings()
    modulus: Literal["no", "deflection", "crosshead", "strain"] = "no"
    peak: Literal["raw", "recovered"] = "recovered"
    time_to_break_s: tuple[float, float] | None = None
    clauses: tuple[Clause, ...] = ()
