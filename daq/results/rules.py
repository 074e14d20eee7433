"""Rules: when a result counts, as values - what the verdict reads, made from a method card. Judges nothing."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import Enum
from types import MappingProxyType

from daq.cards.method import MethodCard
from daq.cards.validity import Outcome
from daq.mechanics.sections import Spans


class Counting(Enum):
    """Whether a bar counts: by the method's rules, or by a person who overrules them (daq.results.verdict)."""

    COUNTED = "counted"
    WITH_REMARK = "counted with remark"
    NOT_COUNTED = "not counted"
    PROVISIONAL = "provisional"
    INTERRUPTED = "interrupted"


@dataclass(frozen=True, slots=True)
class Remark:
    """Something a reader of the number must know. code is fixed, text carries the figures."""

    code: str
    text: str


class Consequence(Enum):
    """What a finding leads to, lightest first."""

    NOTHING = "nothing"
    REMARK = "remark"
    PROVISIONAL = "provisional"
    NOT_COUNTED = "not counted"


class Region(Enum):
    """Where a break counts without a word."""

    ANYWHERE = "anywhere"
    LOAD_SPAN = "load span"
    MIDDLE_THIRD = "middle third"
    ROLLER_WIDTH = "roller width"


@dataclass(frozen=True, slots=True)
class PlaceRule:
    """near: just outside the region, up to near_share of the support span; beyond: further out.

    near_local: the strength of a near break is the stress at its own place (concrete beams, 3Fa/(bd^2)).
    needed: without a position the result stays provisional.
    """

    region: Region = Region.ANYWHERE
    near_share: float = 0.0
    near: Consequence = Consequence.REMARK
    near_local: bool = False
    beyond: Consequence = Consequence.REMARK
    needed: bool = False

    def half_mm(self, spans: Spans, roller_diameter_mm: float) -> float:
        """Half of the region's width about mid-span; infinite where every place counts."""
        return {
            Region.ANYWHERE: float("inf"),
            Region.LOAD_SPAN: spans.load_mm / 2.0,
            Region.MIDDLE_THIRD: spans.support_mm / 6.0,
            Region.ROLLER_WIDTH: roller_diameter_mm / 2.0,
        }[self.region]


# What each remark and finding leads to where the method card says nothing. Common practice, no source.
# "nothing": a property of the set-up that the report states anyway.
DEFAULTS: Mapping[str, Consequence] = MappingProxyType({
    "fixed rollers": Consequence.NOTHING,
    "displacement aligned": Consequence.NOTHING,
    "sizes or spans missing": Consequence.PROVISIONAL,
    "no strength": Consequence.NOT_COUNTED,
    "break position not entered": Consequence.PROVISIONAL,
    "edge thickness not entered": Consequence.PROVISIONAL,
    "stiffness": Consequence.PROVISIONAL,  # look again, not rejection
})  # fmt: skip


@dataclass(frozen=True, slots=True)
class Rules:
    """The method's own rules. consequences: by the code of a remark; what is not named leads to a remark."""

    place: PlaceRule = PlaceRule()
    edge_thickness: bool = False
    consequences: Mapping[str, Consequence] = field(default_factory=dict)
    source: str = "midspan's defaults"

    def consequence(self, code: str) -> Consequence:
        return self.consequences.get(code, DEFAULTS.get(code, Consequence.REMARK))


OUTCOMES: Mapping[Outcome, Consequence] = MappingProxyType({
    "counted": Consequence.NOTHING,
    "remark": Consequence.REMARK,
    "not counted": Consequence.NOT_COUNTED,
})  # fmt: skip


def rules_of(method: MethodCard | None) -> Rules:
    """The rules a method card states; what it leaves out is no rule."""
    if method is None:
        return Rules()
    place = method.validity.break_place
    standard = f" ({method.standard} {method.edition}".rstrip() + ")" if method.standard else ""
    return Rules(
        place=PlaceRule(
            region=Region(place.region),
            near_share=place.near_percent / 100.0,
            near=OUTCOMES[place.near],
            near_local=place.near_stress == "at the break",
            beyond=OUTCOMES[place.beyond],
            needed=place.needed,
        ),
        edge_thickness=method.measuring.thickness_at == "broken edge",
        source=f"rules of method {method.name}{standard}",
    )
