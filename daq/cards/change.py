"""A method card with some values changed for a plan: checked as a card from a file is, and said to be changed."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Final

from pydantic import ValidationError

from daq.cards.derived import mean_mm, section_of
from daq.cards.faults import faults_of, raise_faults
from daq.cards.load import check_method
from daq.cards.method import MethodCard
from daq.cards.series import Specimen

SHARES: Final[Mapping[str, float]] = {"3-point": 0.0, "4-point-quarter": 0.5, "4-point-third": 1.0 / 3.0}
RATE_KEYS: Final[Mapping[str, tuple[str, str]]] = {
    "rate.speed_mm_min": ("crosshead", "speed_mm_min"),
    "rate.rate_n_s": ("force", "rate_n_s"),
    "rate.rate_mpa_s": ("stress", "rate_mpa_s"),
}
SIZES = ("support_span_mm", "load_span_mm", "width_mm", "thickness_mm", "diameter_mm", "inner_diameter_mm")
SEATING_MM_MIN = 0.2  # where a crosshead speed gave the seating and there is none any more


def changed_method(card: MethodCard, changes: Mapping[str, float], name: str = "plan") -> MethodCard:
    """The card with dotted keys set to new values; CardError with one line for every fault.

    A support span alone keeps the shape of the loading (half, a third). A rate in another unit changes the mode.
    Bands of the old rate and the standard's name go when they would no longer be true.
    """
    if not changes:
        return card
    tree = card.model_dump()
    for key, value in changes.items():
        if key in RATE_KEYS:
            _set_rate(tree, *RATE_KEYS[key], value)
        else:
            head, _, tail = key.partition(".")
            if tail:
                tree[head][tail] = value
            else:
                tree[head] = value
    if any(key in SIZES for key in changes):
        _set_spans(tree, changes)
        tree |= {"standard": "", "edition": "", "clauses": ()}
        tree["validity"] = {**tree["validity"], "strain_rate_per_s": None}
        if tree["geometry"] != card.geometry:
            del tree["validity"]["break_place"]  # a rule of the other loading
    try:
        changed = MethodCard.model_validate(tree)
    except ValidationError as error:
        raise_faults(fault.line(name, tree) for fault in faults_of(error, MethodCard))
        raise AssertionError("a faulty card has been refused already") from error
    return check_method(changed, name)


def measured_method(card: MethodCard, bars: Sequence[Specimen]) -> MethodCard:
    """The card with the mean sizes of measured bars, to 1 um, in place of the nominal ones; the rules stay."""
    sizes = [section_of(bar, card) for bar in bars]
    thickness_mm = round(mean_mm(tuple(size.thickness_mm for size in sizes)), 3)
    if card.section != "rectangle":
        inner_mm = round(mean_mm(tuple(size.inner_diameter_mm for size in sizes)), 3)
        return card.model_copy(update={"diameter_mm": thickness_mm, "inner_diameter_mm": inner_mm})
    width_mm = round(mean_mm(tuple(size.width_mm for size in sizes)), 3)
    return card.model_copy(update={"width_mm": width_mm, "thickness_mm": thickness_mm})


def _set_rate(tree: dict[str, object], mode: str, key: str, value: float) -> None:
    rate = tree["rate"]
    preload = tree["preload"]
    assert isinstance(rate, dict) and isinstance(preload, dict)
    if preload["seating_mm_min"] is None and mode != "crosshead":
        tree["preload"] = {**preload, "seating_mm_min": rate["speed_mm_min"] or SEATING_MM_MIN}
    tree["rate"] = {"mode": mode, key: value, "tolerance_percent": rate["tolerance_percent"]}


def _set_spans(tree: dict[str, object], changes: Mapping[str, float]) -> None:
    support, geometry = tree["support_span_mm"], str(tree["geometry"])
    if "load_span_mm" in changes:
        tree["geometry"] = "4-point" if changes["load_span_mm"] > 0 else "3-point"
    elif geometry in SHARES and isinstance(support, float | int):
        tree["load_span_mm"] = support * SHARES[geometry]
