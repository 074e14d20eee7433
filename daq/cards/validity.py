"""Parts of a method card that the verdict, the report and the bench read: rules as data, never as code.

A key that is left out is no rule: nothing is judged, and nothing is claimed to have been judged.
"""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from daq.cards.base import Card, NotNegative, Positive, about

Outcome = Literal["counted", "remark", "not counted"]
Dimension = Literal["width", "thickness", "diameter", "inner diameter", "length", "chamfer", "mass"]
ReportField = Literal[
    "standard", "deviations", "material", "conditioning", "surface", "direction", "moisture", "age",
    "operator", "day", "frame", "fixture", "spans", "bars", "dimensions", "rate", "time to break",
    "temperature", "humidity", "loads", "strengths", "breaking strength", "mean", "standard deviation",
    "weibull", "modulus", "deflection", "break place", "origins", "uncertainty",
]  # fmt: skip


class BreakPlace(Card):
    """Where the tension face may break, and what follows. Near = just outside the region; beyond = further."""

    region: Annotated[
        Literal["anywhere", "load span", "middle third", "roller width"],
        about(
            "", "where a break counts: no rule, between the load rollers, middle third, one roller's width"
        ),
    ] = "anywhere"
    near_percent: Annotated[
        NotNegative, Field(le=50), about("%", "of the support span; up to here outside the region is near")
    ] = 0.0
    near: Annotated[Outcome, about("", "verdict on a break near the region")] = "remark"
    near_stress: Annotated[
        Literal["nominal", "at the break"],
        about("", "strength of a near break: greatest moment, or the moment at the break (3Fa/(bd^2))"),
    ] = "nominal"
    beyond: Annotated[Outcome, about("", "verdict on a break beyond")] = "remark"
    needed: Annotated[bool, about("", "without a position the result stays provisional")] = False


class Validity(Card):
    """When a result counts, as figures. Rate and time to break stand elsewhere in the card."""

    break_place: Annotated[BreakPlace, about("", "table: where a bar may break")] = BreakPlace()
    strain_rate_per_s: Annotated[
        tuple[Positive, Positive] | None, about("1/s", "allowed outer-fibre strain rate, rigid frame")
    ] = None
    force_error_percent: Annotated[
        Positive | None, Field(le=100), about("%", "largest allowed error of the force reading")
    ] = None
    force_range_percent: Annotated[
        tuple[NotNegative, Positive] | None,
        about("%", "part of the cell's capacity in which the breaking force must lie"),
    ] = None
    deflection_error_percent: Annotated[
        Positive | None, Field(le=100), about("%", "largest allowed error of the deflection")
    ] = None
    span_per_thickness: Annotated[
        tuple[Positive, Positive] | None, about("1", "allowed support span over measured thickness")
    ] = None
    strength_mpa_min: Annotated[
        Positive | None, about("MPa", "weaker materials are outside the method's scope")
    ] = None
    strain_percent_max: Annotated[
        Positive | None, Field(le=100), about("%", "above this outer-fibre strain the method does not apply")
    ] = None
    breaking_strength_n_max: Annotated[
        Positive | None, about("N", "from this breaking strength F L/b on no stress is reported (tiles)")
    ] = None
    bars_min: Annotated[int | None, Field(ge=1, le=1000), about("", "fewest counted bars for a mean")] = None
    bars_weibull_min: Annotated[
        int | None, Field(ge=1, le=1000), about("", "fewest counted bars for a Weibull estimate")
    ] = None
    from_mean_percent_max: Annotated[
        Positive | None,
        Field(le=100),
        about("%", "a bar further than this from the mean of its set is flagged; never dropped by midspan"),
    ] = None


class FixtureNeeds(Card):
    """What the method asks of the fixture; compared with the frame card, and printed for the bench."""

    roller_diameter_mm: Annotated[
        tuple[Positive, Positive] | None, about("mm", "allowed diameter of the support rollers")
    ] = None
    load_roller_diameter_mm: Annotated[
        tuple[Positive, Positive] | None, about("mm", "allowed diameter of the load roller(s)")
    ] = None
    rollers_free: Annotated[bool | None, about("", "rollers must be free to roll")] = None
    articulated: Annotated[bool | None, about("", "supports and load roller must tilt to the bar")] = None
    span_tolerance_mm: Annotated[Positive | None, about("mm", "allowed error of the support span")] = None
    span_tolerance_percent: Annotated[
        Positive | None, Field(le=50), about("%", "allowed error of the support span")
    ] = None
    centring_tolerance_mm: Annotated[
        Positive | None, about("mm", "allowed offset of the load roller(s) from the middle")
    ] = None
    overhang_mm_min: Annotated[Positive | None, about("mm", "least overhang of the bar at each end")] = None
    pads: Annotated[Literal["none", "rubber"], about("", "what lies between roller and bar")] = "none"


class Measuring(Card):
    """What is measured of each bar."""

    dimensions: Annotated[
        tuple[Dimension, ...], Field(max_length=7), about("", "sizes to measure of each bar")
    ] = ()
    resolution_mm: Annotated[Positive | None, about("mm", "coarsest allowed resolution of the gauge")] = None
    length_mm_min: Annotated[Positive | None, about("mm", "shortest allowed bar")] = None
    thickness_at: Annotated[
        Literal["bar", "broken edge"],
        about("", "thickness of the bar before the test, or the smallest along the broken edge after it"),
    ] = "bar"


class Strength(Card):
    """How the printed strength is made from the load, beside elementary flexure."""

    breaking_strength: Annotated[bool, about("", "also report F L/b, a force (tiles)")] = False
    density_kg_m3: Annotated[
        Positive | None,
        Field(le=25_000),
        about("kg/m3", "given: the plate's own weight is added (EN 1288-3 form)"),
    ] = None
    edge_factor: Annotated[
        Positive, Field(le=2), about("1", "factor on the stress of a plate; 1 where the card knows none")
    ] = 1.0
    printed_factor_mpa_n: Annotated[
        Positive | None,
        about("MPa/N", "rounded factor printed by the standard; its value is reported beside the exact one"),
    ] = None
    large_deflection: Annotated[
        Literal["no", "ASTM D790", "ASTM D6272", "ISO 14125"],
        about("", "printed correction for large deflection, a separate field beside the strength"),
    ] = "no"


class Rounding(Card):
    """Rounding of the report, once, from unrounded numbers; ties go to the even digit (ASTM E29)."""

    stress_step_mpa: Annotated[Positive | None, about("MPa", "strengths are a multiple of this")] = None
    stress_digits: Annotated[
        int | None, Field(ge=1, le=6), about("", "strengths have this many significant digits")
    ] = None
    force_step_n: Annotated[Positive | None, about("N", "breaking forces are a multiple of this")] = None
