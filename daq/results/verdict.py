"""The verdict on one loading, by the method's rules, before its strength is shown.

`Evidence` holds no load and no stress: what is judged cannot be chosen by its result. Each finding is one rule that
spoke, with what it leads to; the heaviest one decides. A person may overrule it with name and reason (daq.cards.notes);
the rules' own verdict stays beside.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

from daq.mechanics.sections import Spans
from daq.results.rules import Consequence, Counting, Region, Remark, Rules

SHARE_SLACK = 1e-9  # a place on the line counts as inside


@dataclass(frozen=True, slots=True)
class Evidence:
    """What is known of a loading without its load. from_mid_mm: None: not entered. stiffness_ratio: to what
    the plan or the series says, where it is off; explained: what may have gone wrong."""

    broken: bool
    interrupted: bool
    reason: str
    break_class: str
    remarks: tuple[Remark, ...]
    missing: tuple[str, ...]
    has_strength: bool
    from_mid_mm: float | None = None
    spans: Spans | None = None
    roller_diameter_mm: float = 0.0
    edge_thickness_known: bool = False
    stiffness_ratio: float | None = None
    stiffness_against: str = "the plan"
    explained: str = ""


@dataclass(frozen=True, slots=True)
class Finding:
    """One rule that spoke."""

    code: str
    text: str
    consequence: Consequence


@dataclass(frozen=True, slots=True)
class Verdict:
    """findings: in the order of the rules. by: the rules' source, or who overruled them."""

    counting: Counting
    findings: tuple[Finding, ...]
    by: str

    @property
    def reason(self) -> str:
        """The findings that decided it, in a line."""
        heavy = {
            Counting.NOT_COUNTED: (Consequence.NOT_COUNTED,),
            Counting.PROVISIONAL: (Consequence.PROVISIONAL,),
            Counting.WITH_REMARK: (Consequence.REMARK,),
        }.get(self.counting, tuple(Consequence))
        return "; ".join(f.text for f in self.findings if f.consequence in heavy)

    def as_json(self) -> dict[str, object]:
        """Plain values for records, feed and report."""
        return {
            "verdict": self.counting.value,
            "verdict_reason": self.reason,
            "verdict_by": self.by,
            "verdict_findings": [
                {"code": f.code, "text": f.text, "leads_to": f.consequence.value} for f in self.findings
            ],
        }


def judge(evidence: Evidence, rules: Rules) -> Verdict:
    """Deterministic, the same live and years later."""
    if evidence.interrupted:
        why = evidence.reason or evidence.break_class or "no break"
        return Verdict(
            Counting.INTERRUPTED, (Finding("interrupted", why, Consequence.NOTHING),), rules.source
        )
    findings = tuple(_findings(evidence, rules))
    return Verdict(_heaviest(findings), findings, rules.source)


def _heaviest(findings: Sequence[Finding]) -> Counting:
    found = {finding.consequence for finding in findings}
    if Consequence.NOT_COUNTED in found:
        return Counting.NOT_COUNTED
    if Consequence.PROVISIONAL in found:
        return Counting.PROVISIONAL
    return Counting.WITH_REMARK if Consequence.REMARK in found else Counting.COUNTED


def _findings(evidence: Evidence, rules: Rules) -> Iterator[Finding]:
    yield from _completeness(evidence, rules)
    yield from _place(evidence, rules)
    if rules.edge_thickness and evidence.broken and not evidence.edge_thickness_known:
        yield _found(rules, "edge thickness not entered", "thickness along the broken edge not entered")
    if evidence.stiffness_ratio is not None:
        words = f"stiffness {evidence.stiffness_ratio:.2f} of {evidence.stiffness_against}"
        yield _found(rules, "stiffness", f"{words}: {evidence.explained}" if evidence.explained else words)
    for remark in evidence.remarks:
        yield _found(rules, remark.code, remark.text)


def _found(rules: Rules, code: str, text: str) -> Finding:
    return Finding(code, text, rules.consequence(code))


def _completeness(evidence: Evidence, rules: Rules) -> Iterator[Finding]:
    missing = "; ".join(evidence.missing)
    if evidence.has_strength:
        if missing:
            yield _found(rules, "incomplete", missing)
    elif evidence.broken and missing:
        yield _found(rules, "sizes or spans missing", missing)
    else:
        yield _found(rules, "no strength", f"no strength can be given ({evidence.break_class or 'no break'})")


def _place(evidence: Evidence, rules: Rules) -> Iterator[Finding]:
    rule, at_mm, spans = rules.place, evidence.from_mid_mm, evidence.spans
    if not evidence.broken:
        return
    if at_mm is None or spans is None:
        if rule.needed or rules.edge_thickness:
            yield _found(rules, "break position not entered", "break position not entered")
        return
    share = (abs(at_mm) - rule.half_mm(spans, evidence.roller_diameter_mm)) / spans.support_mm
    if share <= SHARE_SLACK:
        return
    where = f"broken {at_mm:+.4g} mm from mid-span"
    where += f", {100 * share:.1f} % of the support span outside the {REGION[rule.region]}"
    if share <= rule.near_share + SHARE_SLACK:
        yield Finding("break near the region", where, rule.near)
    elif rule.near_share > 0:
        yield Finding(
            "break outside the region", f"{where}; {100 * rule.near_share:g} % allowed", rule.beyond
        )
    else:
        yield Finding("break outside the region", where, rule.beyond)


REGION = {
    Region.ANYWHERE: "bar",
    Region.LOAD_SPAN: "load span",
    Region.MIDDLE_THIRD: "middle third",
    Region.ROLLER_WIDTH: "width of the middle roller",
}


def remarks_from_json(result: Mapping[str, object]) -> tuple[Remark, ...]:
    """The remarks of a result as sealed; what is not one is left out."""
    listed = result.get("remarks")
    found = [item for item in listed if isinstance(item, Mapping)] if isinstance(listed, list | tuple) else []
    return tuple(Remark(str(item.get("code", "")), str(item.get("text", ""))) for item in found)
