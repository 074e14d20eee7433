"""JSON Schema of the three cards, for editors and for `midspan check --schema`. Cross rules are not in it."""

from __future__ import annotations

from collections.abc import Mapping

from daq.cards.base import Card
from daq.cards.frame import FrameCard
from daq.cards.method import MethodCard
from daq.cards.series import SeriesCard

DIALECT = "https://json-schema.org/draft/2020-12/schema"
CARDS: Mapping[str, type[Card]] = {"frame": FrameCard, "method": MethodCard, "series": SeriesCard}


def card_schema(kind: str) -> dict[str, object]:
    """JSON Schema of one kind of card: 'frame', 'method' or 'series'. KeyError for another kind."""
    return {"$schema": DIALECT, **CARDS[kind].model_json_schema()}


def all_schemas() -> dict[str, dict[str, object]]:
    """JSON Schema of every card, by kind."""
    return {kind: card_schema(kind) for kind in CARDS}
