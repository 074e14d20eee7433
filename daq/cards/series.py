"""The series card and its bench sheet: the bars of one sitting, who breaks them, and their sizes."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from daq.cards.base import Card
from daq.cards.frame import NotNegative, Positive

FileName = Annotated[str, Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9_.-]{0,63}$")]


class Specimen(Card):
    """One bar. Readings in mm; rectangle: width and thickness, circle: diameter in thickness_mm."""

    number: FileName
    width_mm: tuple[Positive, ...] = ()
    thickness_mm: tuple[Positive, ...]
    inner_diameter_mm: NotNegative = 0.0
    chamfer_mm: NotNegative | None = None            # None: the method's
    length_mm: Positive | None = None
    batch: str = ""
    note: str = ""


class SeriesCard(Card):
    """One sitting."""

    card: Literal["series"]
    name: FileName
    operator: Annotated[str, Field(min_length=1, max_length=80)]
    material: str = ""
    method: str                                      # file of the method card, relative to this card
    fixture: str                                     # name of the fixture as fitted
    sheet: str                                       # file of the bench sheet (CSV), relative to this card
    temperature_c: float | None = None
    humidity_percent: Annotated[float, Field(ge=0, le=100)] | None = None
    copy_to: str | None = None                       # a folder that gets a verified copy of each sealed record
