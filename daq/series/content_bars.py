"""The report's pages about single bars: every loading in a row, and in words what was remarked, changed, overruled."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from daq.results.corrections import Change
from daq.results.rules import Consequence
from daq.series.blocks import Facts, Grid, Lines, Picture, Section, Tone
from daq.series.leaf import Leaf, Series
from daq.series.words import NONE, digits, number, stress


def bars_section(series: Series) -> Section:
    """Two tables, one row a loading each, and the small multiples."""
    leaves = series.leaves
    strengths = Grid(
        ("bar", "verdict", "width mm", "height mm", "load N", "strength MPa", "U, k = 2 MPa", "chamfer MPa",
         "at origin MPa", "origin", "from mid mm"),
        tuple(_strength_row(leaf, series) for leaf in leaves),
        (0.9, 1.9, 0.8, 0.8, 0.8, 0.95, 0.85, 0.9, 0.9, 1.0, 0.9),
        frozenset({0, 1, 9}),
    )  # fmt: skip
    courses = Grid(
        ("bar", "break", "to break s", "mean MPa/s", "least MPa/s", "most MPa/s", "E GPa", "u(fit) GPa", "work mJ",
         "toe %", "zero shift N"),
        tuple(_course_row(leaf) for leaf in leaves),
        (1.1, 1.5, 0.85, 0.9, 0.9, 0.9, 0.8, 0.75, 0.8, 0.65, 0.95),
        frozenset({0, 1}),
    )  # fmt: skip
    note = (
        "Strength: nominal beam stress, which enters the statistics. 'chamfer': with the second moment that chamfers"
        " take away. 'at origin': nominal stress at the place of the break or origin. Work: of the bar where the"
        " machine's part is known. Toe: share of the bar's own peak load.",
        "u(fit): standard error of the fitted slope alone; force, spans, sizes and compliance are not in it.",
        _moduli(series),
    )
    return Section(
        "All bars, in the order of loading",
        (Picture("traces", "Nominal stress of every loading up to its end; the same axes in each field."), strengths,
         courses, Lines(note)),
    )  # fmt: skip


def _moduli(series: Series) -> str:
    sources = dict.fromkeys(str(leaf.standing.result.get("modulus_source") or "") for leaf in series.leaves)
    refused = dict.fromkeys(str(leaf.standing.result.get("modulus_refused") or "") for leaf in series.leaves)
    told = [f"E {text}" for text in sources if text] + [f"no E: {text}" for text in refused if text]
    return "; ".join(told) + "."


def _name(leaf: Leaf) -> str:
    return leaf.number if leaf.loading == 1 else f"{leaf.number} ({leaf.loading})"


def _strength_row(leaf: Leaf, series: Series) -> tuple[str, ...]:
    standing = leaf.standing
    section = standing.setup.section
    width = getattr(section, "width_mm", None)
    factor = leaf.value("chamfer_factor")
    strength = standing.strength_mpa
    survived = leaf.value("stress_survived_mpa")
    shown = (
        f"> {stress(survived, series.method)}"
        if strength is None and survived
        else stress(strength, series.method)
    )
    with_chamfer = None if strength is None or factor is None else strength * factor
    return (
        _name(leaf),
        standing.verdict.counting.value,
        number(width, 3),
        number(None if section is None else section.depth_mm, 3),
        digits(leaf.value("peak_n"), 4),
        shown,
        digits(leaf.value("strength_u_k2_mpa"), 2),
        stress(with_chamfer, series.method),
        stress(standing.local_mpa, series.method),
        NONE if standing.origin is None else standing.origin.text,
        NONE if standing.place is None else f"{standing.place.from_mid_mm:+.1f}",
    )


def _course_row(leaf: Leaf) -> tuple[str, ...]:
    return (
        _name(leaf),
        str(leaf.standing.result.get("break_class") or leaf.standing.result.get("failure") or NONE),
        number(leaf.value("time_to_break_s"), 1),
        *(digits(leaf.value(f"stress_rate_{name}_mpa_s"), 3) for name in ("mean", "min", "max")),
        digits(leaf.value("modulus_gpa"), 4),
        digits(leaf.value("modulus_u_slope_gpa"), 2),
        digits(leaf.value("work_to_break_mj"), 3),
        number(leaf.value("toe_share_percent"), 1),
        number(leaf.value("after_zero_n"), 2),
    )


def remarks_section(series: Series) -> Section:
    """Only bars of which something is to be said; the same words of many bars are said once."""
    common, single = _shared(series)
    blocks: list[Lines | Facts] = []
    if common:
        blocks.append(Facts(common))
    rows = tuple(row for leaf in series.leaves for row in _said(leaf, single))
    blocks.append(Facts(rows) if rows else Lines(("Nothing else was remarked.",)))
    damaged = tuple(problem for leaf in series.leaves for problem in leaf.problems)
    if damaged:
        blocks.append(Lines(damaged, Tone.LOUD))
    return Section("Remarks, corrections, verdicts", tuple(blocks))


SHARED_MIN = 4  # a text of so many bars stands once


def _shared(series: Series) -> tuple[tuple[tuple[str, str], ...], frozenset[str]]:
    """Texts that many bars share, with their bars; and the texts that are said at each bar."""
    where: dict[str, list[str]] = {}
    for leaf in series.leaves:
        for text in _findings(leaf):
            where.setdefault(text, []).append(_name(leaf))
    common = tuple(
        (_bars(names, len(series.leaves)), text) for text, names in where.items() if len(names) >= SHARED_MIN
    )
    return common, frozenset(text for text, names in where.items() if len(names) < SHARED_MIN)


def _bars(names: list[str], whole: int) -> str:
    if len(names) == whole:
        return "all loadings"
    return (
        f"{len(names)} loadings: {', '.join(names)}"
        if len(names) <= 6
        else f"{len(names)} of {whole} loadings"
    )


def _findings(leaf: Leaf) -> list[str]:
    found = []
    for finding in leaf.standing.verdict.findings:
        heavy = finding.consequence in (Consequence.NOT_COUNTED, Consequence.PROVISIONAL)
        text = finding.text if finding.code in finding.text else f"{finding.code}: {finding.text}"
        found.append(f"{text} [{finding.consequence.value}]" if heavy else text)
    return found


def _said(leaf: Leaf, single: frozenset[str]) -> Iterator[tuple[str, str]]:
    standing = leaf.standing
    name = _name(leaf)
    for text in _findings(leaf):
        if text in single:
            yield name, text
    if standing.by_rules.counting is not standing.verdict.counting:
        yield name, f"by the method's rules: {standing.by_rules.counting.value}"
    for change in standing.changes:
        yield name, _change(change, leaf)
    for text in standing.remarks:
        yield name, f"remark: {text}"
    if leaf.gaps:
        yield name, f"{leaf.gaps} gaps in the samples, listed in the record"


def _change(change: Change, leaf: Leaf) -> str:
    text = f"{change.what} changed from {_value(change.old)} to {_value(change.new)}"
    before, now = leaf.standing.sealed.get("strength_mpa"), leaf.standing.result.get("strength_mpa")
    if before != now and change.what != "verdict":
        text += f" (strength as sealed {digits(before)} MPa, now {digits(now)} MPa)"
    return f"{text}: {change.reason} ({change.name}, {change.utc[:16]} UTC)"


def _value(value: Any) -> str:
    if isinstance(value, list | tuple):
        return ", ".join(f"{one:g}" for one in value) or "not recorded"
    return str(value)
