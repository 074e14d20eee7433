"""What every card has in common: strict, frozen, no unknown keys, no infinities."""

from __future__ import annotations

from pydantic import BaseModel, ConfigDict


class Card(BaseModel):
    """Base of all card parts. Integers are accepted where a float is meant; nothing else is coerced."""

    model_config = ConfigDict(strict=True, extra="forbid", frozen=True, allow_inf_nan=False)
