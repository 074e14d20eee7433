"""The report's numbers for other programs: CSV with units in the column names, and JSON. Unrounded, decimal point."""

from __future__ import annotations

import csv
import io
import json
import math
from collections.abc import Mapping
from dataclasses import asdict, is_dataclass
from enum import Enum
from typing import Any

from daq.series.blocks import Report
from daq.series.leaf import Leaf, Series

COLUMNS = (
    "peak_n", "strength_mpa", "strength_u_k2_mpa", "strength_chamfer_mpa", "strength_zero_corrected_mpa",
    "stress_survived_mpa", "breaking_strength_n", "strain_at_break", "deflection_at_break_mm", "work_to_break_mj",
    "time_to_break_s", "toe_n", "toe_share_percent", "stress_rate_mean_mpa_s", "stress_rate_min_mpa_s",
    "stress_rate_max_mpa_s", "modulus_gpa", "modulus_u_slope_gpa", "after_zero_n",
)  # fmt: skip


def csv_of(series: Series) -> bytes:
    """One row a loading, in order; an empty cell where there is no number. A simulated row says so."""
    text = io.StringIO()
    table = csv.writer(text, lineterminator="\n")
    table.writerow([
        "specimen", "loading", "created_utc", "verdict", "verdict_reason", "strength_counted_mpa", "width_mm",
        "thickness_mm", *COLUMNS, "break_from_mid_mm", "stress_at_origin_mpa", "origin", "break_class", "changes",
        "record", "sha256", "notes_head", "simulated",
    ])  # fmt: skip
    for leaf in series.leaves:
        table.writerow(_row(leaf))
    return text.getvalue().encode("utf-8")


def _row(leaf: Leaf) -> list[str]:
    standing = leaf.standing
    section = standing.setup.section
    place = None if standing.place is None else standing.place.from_mid_mm
    return [
        leaf.number, str(leaf.loading), str(leaf.meta["created_utc"]), standing.verdict.counting.value,
        standing.verdict.reason, _cell(standing.strength_mpa if standing.counts else None),
        _cell(getattr(section, "width_mm", None)), _cell(None if section is None else section.depth_mm),
        *(_cell(leaf.value(name)) for name in COLUMNS), _cell(place), _cell(standing.local_mpa),
        "" if standing.origin is None else standing.origin.text, str(standing.result.get("break_class") or ""),
        str(len(standing.changes)), leaf.name, str(leaf.meta.get("sha256", "")), leaf.head,
        "0" if leaf.meta.get("simulated") is False else "1",
    ]  # fmt: skip


def _cell(value: float | None) -> str:
    return "" if value is None or not math.isfinite(value) else repr(float(value))


def json_of(series: Series, report: Report) -> bytes:
    """Everything: marks, analysis, every loading as it stands with what was sealed beside it."""
    whole = {
        "report": {"title": report.title, "marks": list(report.marks), "left_out": list(series.left_out)},
        "simulated": series.simulated,
        "analysis": plain(series.analysis),
        "loadings": [
            {
                "specimen": leaf.number,
                "loading": leaf.loading,
                "record": leaf.name,
                "record_sha256": leaf.meta.get("sha256"),
                "created_utc": leaf.meta.get("created_utc"),
                "midspan_version": leaf.meta.get("midspan_version"),
                "notes": leaf.notes,
                "notes_head": leaf.head,
                "notes_problems": list(leaf.problems),
                "standing": leaf.standing.as_json(),
            }
            for leaf in series.leaves
        ],
    }
    return (json.dumps(plain(whole), ensure_ascii=False, indent=1, sort_keys=True) + "\n").encode("utf-8")


def plain(value: Any) -> Any:
    """Values that JSON knows; a number that is not finite becomes null."""
    if is_dataclass(value) and not isinstance(value, type):
        return plain(asdict(value))
    if isinstance(value, Enum):
        return value.value
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple | frozenset):
        return [plain(item) for item in value]
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    return value
