"""What every card has in common: strict, frozen, no unknown keys, no infinities, every key described."""

from __future__ import annotations

from typing import Annotated

from pydantic import AfterValidator, BaseModel, ConfigDict, Field
from pydantic.fields import FieldInfo

from daq.cards.names import name_fault


def about(unit: str, text: str) -> FieldInfo:
    """The description of a key: docs/cards.md, the JSON Schema and every fault line are made from it."""
    info: FieldInfo = Field(description=text, json_schema_extra={"unit": unit})
    return info


def _safe_name(text: str) -> str:
    fault = name_fault(text)
    if fault is not None:
        raise ValueError(fault)
    return text


Positive = Annotated[float, Field(gt=0)]
NotNegative = Annotated[float, Field(ge=0)]
# Names inside a card (links, channels, fixtures) reach no file system; FrameName and FileName do.
Name = Annotated[str, Field(pattern=r"^[a-z][a-z0-9-]{0,31}$")]
FrameName = Annotated[Name, AfterValidator(_safe_name)]
FileName = Annotated[str, Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9_.-]{0,63}$"), AfterValidator(_safe_name)]


class Card(BaseModel):
    """Base of all card parts. Integers are accepted where a float is meant; nothing else is coerced."""

    model_config = ConfigDict(strict=True, extra="forbid", frozen=True, allow_inf_nan=False)
