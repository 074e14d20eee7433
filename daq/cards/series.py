"""The series card and its bench sheet: the bars of one sitting, who breaks them, and their sizes."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from daq.cards.base import Card, FileName, NotNegative, Positive, about
from daq.cards.method import Expected

Readings = Annotated[tuple[Positive, ...], Field(max_length=10)]


class Specimen(Card):
    """One bar. Readings in mm; rectangle: width and thickness, circle: diameter in thickness_mm."""

    number: Annotated[FileName, about("", "number written on both ends; never used twice")]
    width_mm: Annotated[Readings, about("mm", "readings of the width; none for circle and tube")] = ()
    thickness_mm: Annotated[
        Readings, Field(min_length=1), about("mm", "readings of the thickness, or of the outer diameter")
    ]
    inner_diameter_mm: Annotated[NotNegative, about("mm", "inner diameter of a tube")] = 0.0
    chamfer_mm: Annotated[NotNegative | None, about("mm", "chamfer; left out: the method's")] = None
    length_mm: Annotated[Positive | None, about("mm", "length of the bar")] = None
    batch: Annotated[str, Field(max_length=80), about("", "batch, firing or position")] = ""
    note: Annotated[str, Field(max_length=200), about("", "surface state, chips seen, ...")] = ""


class SeriesCard(Card):
    """One sitting."""

    card: Annotated[Literal["series"], about("", "kind of this card")]
    name: Annotated[FileName, about("", "name of the series; becomes a folder and a part of each file name")]
    operator: Annotated[str, Field(min_length=1, max_length=80), about("", "who breaks the bars")]
    material: Annotated[str, Field(max_length=120), about("", "material, in words")] = ""
    method: Annotated[
        str,
        Field(min_length=1, max_length=255),
        about("", "file of the method card, relative to this card, or a name of `midspan methods`"),
    ]
    expected: Annotated[
        Expected | None,
        about("", "table: this material, instead of the method's; needed with a shipped method"),
    ] = None
    fixture: Annotated[str, Field(min_length=1, max_length=32), about("", "name of the fixture as fitted")]
    sheet: Annotated[
        str,
        Field(min_length=1, max_length=255),
        about("", "file of the bench sheet (CSV), relative to this card"),
    ]
    temperature_c: Annotated[
        Annotated[float, Field(ge=-90, le=2000)] | None, about("degC", "temperature at the bar")
    ] = None
    humidity_percent: Annotated[
        Annotated[float, Field(ge=0, le=100)] | None, about("%", "relative humidity at the bar")
    ] = None
