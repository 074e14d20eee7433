"""Notes: what people say about a loading after it was sealed - break note, correction, verdict, remark. Pure values.

A note never replaces anything: it names who, when and why, and what stood before. They are kept beside the sealed
record (daq.record.notes) and applied by daq.results.standing.
"""

from __future__ import annotations

from collections.abc import Mapping
from enum import Enum
from typing import Annotated, Any, Literal, Self

from pydantic import AfterValidator, Field, ValidationError, model_validator

from daq.cards.base import Card, about
from daq.cards.names import has_control
from daq.cards.origins import TEXT_MAX, read_origin
from daq.errors import CardError

LENGTH_MM_MAX = 10_000.0
NAME_MAX, REASON_MAX = 80, 400


def _plain(text: str) -> str:
    if has_control(text):
        raise ValueError("no control or invisible characters: type it again as plain text")
    return text


def _origin(text: str) -> str:
    read_origin(_plain(text))
    return text


Words = Annotated[str, AfterValidator(_plain)]
Place = Annotated[float, Field(ge=-LENGTH_MM_MAX, le=LENGTH_MM_MAX)]
Sizes = Annotated[
    tuple[Annotated[float, Field(gt=0, le=LENGTH_MM_MAX)], ...], Field(min_length=1, max_length=10)
]


class Picture(Card):
    """An image that belongs to a break, by its digest, so that a changed file is seen."""

    file: Annotated[Words, Field(min_length=1, max_length=200), about("", "name of the image file")]
    sha256: Annotated[str, Field(pattern=r"^[0-9a-f]{64}$"), about("", "SHA-256 of the file")]


class BreakNote(Card):
    """What the pieces show. A field left out says nothing, and leaves what an earlier note said."""

    from_mid_mm: Annotated[
        Annotated[tuple[Place, ...], Field(min_length=1, max_length=8)] | None,
        about("mm", "breaks on the tension face from mid-span, right positive; the primary one first"),
    ] = None
    measured: Annotated[Words, Field(max_length=80), about("", "how the position was measured")] = ""
    pieces: Annotated[Annotated[int, Field(ge=1, le=1000)] | None, about("", "number of pieces")] = None
    kept: Annotated[
        Literal["left", "right", "both", "none"] | None,
        about("", "which pieces of the primary break are kept"),
    ] = None
    origin: Annotated[
        Annotated[str, Field(max_length=TEXT_MAX), AfterValidator(_origin)] | None,
        about("", "fracture origin: codes with joiners, see daq.cards.origins"),
    ] = None
    origin_from_mid_mm: Annotated[
        Place | None, about("mm", "origin from mid-span; left out: at the primary break")
    ] = None
    origin_depth_mm: Annotated[
        Annotated[float, Field(ge=0, le=LENGTH_MM_MAX)] | None, about("mm", "origin from the tension face")
    ] = None
    edge_thickness_mm: Annotated[
        Sizes | None,
        about("mm", "thickness along the broken edge; the smallest reading is used where the method says so"),
    ] = None
    pictures: Annotated[tuple[Picture, ...], Field(max_length=20), about("", "list: images")] = ()


class Quantity(Enum):
    """What may be corrected."""

    WIDTH = "width_mm"
    THICKNESS = "thickness_mm"
    INNER_DIAMETER = "inner_diameter_mm"
    CHAMFER = "chamfer_mm"
    LENGTH = "length_mm"
    SUPPORT_SPAN = "support_span_mm"
    LOAD_SPAN = "load_span_mm"


READINGS = (Quantity.WIDTH, Quantity.THICKNESS)


class Correction(Card):
    """One quantity, with what it was and what it is. Readings of width and thickness: several; else one number."""

    quantity: Annotated[Literal[tuple(q.value for q in Quantity)], about("", "what is corrected")]  # type: ignore[valid-type]
    old: Annotated[tuple[float, ...], Field(max_length=10), about("mm", "what stood before")]
    new: Annotated[
        Annotated[
            tuple[Annotated[float, Field(ge=0, le=LENGTH_MM_MAX)], ...], Field(min_length=1, max_length=10)
        ],
        about("mm", "what is right"),
    ]

    @model_validator(mode="after")
    def _fits(self) -> Self:
        zero_allowed = (Quantity.CHAMFER, Quantity.INNER_DIAMETER, Quantity.LOAD_SPAN)
        if Quantity(self.quantity) not in READINGS and len(self.new) != 1:
            raise ValueError(f"{self.quantity}: one number, found {len(self.new)}")
        if Quantity(self.quantity) not in zero_allowed and not all(value > 0 for value in self.new):
            raise ValueError(f"{self.quantity}: above 0 mm; give it as measured")
        return self


class VerdictChange(Card):
    """A person overrules the method's rules."""

    old: Annotated[str, Field(max_length=40), about("", "verdict that stood before")]
    new: Annotated[
        Literal["counted", "counted with remark", "not counted"], about("", "verdict that stands from now on")
    ]


class Note(Card):
    """One line of a record's notes: who, when, why, and exactly one thing said."""

    name: Annotated[Words, Field(min_length=1, max_length=NAME_MAX), about("", "who says so")]
    utc: Annotated[
        str,
        Field(pattern=r"^\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d(\.\d{1,6})?(Z|\+00:00)$"),
        about("", "when, UTC"),
    ]
    reason: Annotated[Words, Field(max_length=REASON_MAX), about("", "why")] = ""
    break_note: Annotated[BreakNote | None, about("", "what the pieces show")] = None
    correction: Annotated[Correction | None, about("", "a size or span that was wrong")] = None
    verdict: Annotated[VerdictChange | None, about("", "a verdict overruled")] = None
    remark: Annotated[Words, Field(max_length=REASON_MAX), about("", "a remark in words")] = ""

    @model_validator(mode="after")
    def _one_thing(self) -> Self:
        said = [
            self.break_note is not None,
            self.correction is not None,
            self.verdict is not None,
            bool(self.remark),
        ]
        if sum(said) != 1:
            raise ValueError("a note says one thing: a break note, a correction, a verdict or a remark")
        if (self.correction is not None or self.verdict is not None) and not self.reason.strip():
            raise ValueError("reason: why must be said where a value or a verdict is changed")
        return self

    def as_json(self) -> dict[str, Any]:
        """Plain values, what was left out left out."""
        return self.model_dump(mode="json", exclude_defaults=True)


def read_note(fields: Mapping[str, Any]) -> Note:
    """From plain values. CardError with one line a fault."""
    try:
        return Note.model_validate(dict(fields), strict=False)
    except ValidationError as error:
        lines = []
        for fault in error.errors():
            where = ".".join(str(part) for part in fault["loc"]) or "note"
            lines.append(f"{where}: {fault['msg'].removeprefix('Value error, ')}")
        raise CardError(tuple(lines)) from error


def merged_break_note(notes: tuple[Note, ...]) -> BreakNote | None:
    """What all break notes together say: a later one replaces the fields it gives; pictures are added. None: none."""
    told = [note.break_note for note in notes if note.break_note is not None]
    if not told:
        return None
    fields: dict[str, Any] = {}
    for one in told:
        fields |= {key: getattr(one, key) for key in one.model_fields_set if key != "pictures"}
    fields["pictures"] = tuple(picture for one in told for picture in one.pictures)
    return BreakNote.model_validate(fields)
