"""The method card: how a kind of bar is tested and judged. Clause values stay marked until signed."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from daq.cards.base import Card, FileName, NotNegative, Positive, about
from daq.cards.validity import FixtureNeeds, Measuring, ReportField, Rounding, Strength, Validity

Geometry = Literal["3-point", "4-point-quarter", "4-point-third", "4-point"]
Section = Literal["rectangle", "circle", "tube"]
Mark = Literal["confirmed", "from memory", "unchecked", "checked", "own choice"]
IsoDay = Annotated[str, Field(pattern=r"^$|^[0-9]{4}-[0-9]{2}-[0-9]{2}$")]


class Clause(Card):
    """Where a value comes from."""

    key: Annotated[str, Field(min_length=1, max_length=80), about("", "dotted key of this card")]
    standard: Annotated[
        str, Field(max_length=80), about("", "designation of the standard; empty: the card's own")
    ] = ""
    edition: Annotated[str, Field(max_length=40), about("", "edition; empty: the card's own")] = ""
    clause: Annotated[str, Field(max_length=40), about("", "clause; empty: not recorded")] = ""
    mark: Annotated[Mark, about("", "how sure the value is; 'checked' needs checked_by and checked_on")] = (
        "unchecked"
    )
    source: Annotated[
        str, Field(max_length=120), about("", "where a confirmed value was seen, or how it was computed")
    ] = ""
    checked_by: Annotated[str, Field(max_length=80), about("", "who compared it with the standard")] = ""
    checked_on: Annotated[IsoDay, about("date", "when, as YYYY-MM-DD")] = ""


class Rate(Card):
    """What is held constant while loading, and who closes the loop for force and stress rates."""

    mode: Annotated[
        Literal["crosshead", "force", "stress"], about("", "crosshead speed, force rate or stress rate")
    ]
    speed_mm_min: Annotated[
        Positive | None,
        about("mm/min", "test speed of mode 'crosshead'; first speed of a loop closed by midspan"),
    ] = None
    rate_n_s: Annotated[Positive | None, about("N/s", "force rate of mode 'force'")] = None
    rate_mpa_s: Annotated[Positive | None, about("MPa/s", "stress rate of mode 'stress'")] = None
    loop: Annotated[
        Literal["frame", "midspan"],
        about("", "who holds a force or stress rate: the machine itself, or midspan"),
    ] = "frame"
    tolerance_percent: Annotated[Positive, Field(le=100), about("%", "band of the achieved rate")] = 20.0
    speed_band_mm_min: Annotated[
        tuple[NotNegative, Positive] | None, about("mm/min", "speeds the standard allows; overrides the band")
    ] = None
    band_n_s: Annotated[
        tuple[NotNegative, Positive] | None,
        about("N/s", "force rates the standard allows; overrides the band"),
    ] = None
    band_mpa_s: Annotated[
        tuple[NotNegative, Positive] | None,
        about("MPa/s", "stress rates the standard allows; overrides the band"),
    ] = None


class Expected(Card):
    """What the bars are expected to do; the plan and the limits start from this."""

    strength_mpa: Annotated[Positive, about("MPa", "mean strength")]
    weibull_modulus: Annotated[float, Field(ge=1, le=100), about("", "Weibull modulus")] = 10.0
    modulus_gpa: Annotated[float, Field(gt=0.1, le=1000), about("GPa", "Young's modulus")]
    poisson_ratio: Annotated[float, Field(ge=0, lt=0.5), about("", "Poisson's ratio")] = 0.25


class Preload(Card):
    """Seating before the test rate."""

    seat_percent: Annotated[
        float, Field(gt=0, le=10), about("%", "seating force, of the median expected break load")
    ] = 2.0
    hold_s: Annotated[NotNegative, Field(le=600), about("s", "hold at the seating force")] = 0.0
    seating_mm_min: Annotated[
        Positive | None, about("mm/min", "speed while seating; left out: rate.speed_mm_min")
    ] = None


class Limits(Card):
    """Limits that belong to the method. Cell and fixture limits come from the frame card and always apply."""

    force_n_max: Annotated[
        Positive | None,
        about("N", "stop above this gross force; may only tighten the limits of cell and fixture"),
    ] = None
    travel_mm_max: Annotated[Positive | None, about("mm", "stop after this travel from contact")] = None
    run_s_max: Annotated[Positive, Field(le=86_400), about("s", "stop after this time of loading")] = 600.0
    force_only_allowed: Annotated[bool, about("", "go on without the displacement sensor")] = False


class FractureSettings(Card):
    """How a break is told from a slip, a pop-in and a glitch; every number may be tuned."""

    threshold_sigma: Annotated[
        Positive, Field(le=100), about("sigma", "a candidate lies this far from the forecast")
    ] = 6.0
    threshold_percent: Annotated[
        float, Field(gt=0, le=20), about("%", "and at least this far, of the forecast")
    ] = 2.0
    break_percent: Annotated[
        float, Field(gt=0, lt=100), about("%", "a sudden break falls below this, of the forecast")
    ] = 50.0
    lasting_percent: Annotated[
        float, Field(gt=0, le=20), about("%", "a lasting drop above this always stops the machine")
    ] = 20.0
    confirm_s: Annotated[
        Positive, Field(le=1), about("s", "confirming window; at least 3 samples and 3 time constants")
    ] = 0.010
    tail_s: Annotated[float, Field(ge=0.5, le=10), about("s", "recorded after the break")] = 0.5


class MethodCard(Card):
    """One way of testing one kind of bar."""

    card: Annotated[Literal["method"], about("", "kind of this card")]
    name: Annotated[FileName, about("", "name of the method")]
    title: Annotated[str, Field(max_length=120), about("", "one line for people")] = ""
    standard: Annotated[
        str, Field(max_length=80), about("", "designation of the standard; empty: a method of one's own")
    ] = ""
    edition: Annotated[str, Field(max_length=40), about("", "edition of the standard")] = ""
    scope: Annotated[str, Field(max_length=120), about("", "what it is for, in a few words")] = ""
    geometry: Annotated[
        Geometry,
        about("", "load span: 0 (3-point), half (quarter), a third (third) of the support span, or free"),
    ]
    section: Annotated[Section, about("", "cross-section of the bar")]
    support_span_mm: Annotated[Positive, Field(le=10_000), about("mm", "support span the fixture must have")]
    load_span_mm: Annotated[NotNegative, about("mm", "load span the fixture must have; 0 for 3-point")] = 0.0
    width_mm: Annotated[Positive | None, about("mm", "nominal width (rectangle)")] = None
    thickness_mm: Annotated[
        Positive | None, about("mm", "nominal thickness, in the loading direction (rectangle)")
    ] = None
    diameter_mm: Annotated[Positive | None, about("mm", "nominal outer diameter (circle, tube)")] = None
    inner_diameter_mm: Annotated[NotNegative, about("mm", "nominal inner diameter (tube)")] = 0.0
    dimension_tolerance_percent: Annotated[
        Positive, Field(le=50), about("%", "readings further from nominal than this are asked about")
    ] = 10.0
    readings: Annotated[int, Field(ge=1, le=10), about("", "readings of each dimension of each bar")] = 3
    dimension_u_mm: Annotated[
        NotNegative, about("mm", "half-width of a gauge's uncertainty (rectangular)")
    ] = 0.005
    chamfer_mm: Annotated[NotNegative, about("mm", "45 degree chamfer of the four long edges")] = 0.0
    rate: Annotated[Rate, about("", "table: what is held constant")]
    expected: Annotated[Expected, about("", "table: what the bars are expected to do")]
    preload: Annotated[Preload, about("", "table: seating")] = Preload()
    limits: Annotated[Limits, about("", "table: limits of the method")] = Limits()
    fracture: Annotated[FractureSettings, about("", "table: settings of the fracture watch")] = (
        FractureSettings()
    )
    modulus: Annotated[
        Literal["no", "deflection", "crosshead", "strain"], about("", "sensor the modulus is taken from")
    ] = "no"
    peak: Annotated[
        Literal["raw", "recovered"],
        about("", "reported peak: highest raw sample, or recovered between samples"),
    ] = "recovered"
    time_to_break_s: Annotated[
        tuple[Positive, Positive] | None, about("s", "shortest and longest time from start to break")
    ] = None
    measuring: Annotated[Measuring, about("", "table: what is measured of each bar")] = Measuring()
    needs: Annotated[FixtureNeeds, about("", "table: what the fixture must be")] = FixtureNeeds()
    validity: Annotated[Validity, about("", "table: when a result counts")] = Validity()
    strength: Annotated[Strength, about("", "table: how the printed strength is made")] = Strength()
    rounding: Annotated[Rounding, about("", "table: rounding of the report")] = Rounding()
    report_fields: Annotated[
        tuple[ReportField, ...],
        Field(max_length=40),
        about("", "what the report must hold; a missing one makes it incomplete"),
    ] = ()
    notes: Annotated[
        tuple[Annotated[str, Field(min_length=1, max_length=160)], ...],
        Field(max_length=12),
        about("", "facts in a few words of one's own, shown with the card"),
    ] = ()
    clauses: Annotated[
        tuple[Clause, ...], Field(max_length=100), about("", "list of tables: sources of values")
    ] = ()
