"""A sealed record, and its series, as the window plays it."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from daq.cards.derived import fixture_by_name, load_for_stress_n, section_of, spans_of
from daq.cards.frame import FrameCard
from daq.cards.method import MethodCard
from daq.cards.series import Specimen
from daq.cli.keeper import said_of
from daq.errors import MidspanError
from daq.record.read import read_meta, read_run, read_trace
from daq.results.expected import band_of
from daq.station.found import found_records
from daq.station.notebook import read_page
from monitor.playback import Recording

STORED = {"net_n": "force_net_n"}  # columns that a record names otherwise than the feed


def recording_of(path: Path) -> Recording:
    """Raises RecordDamaged where the record does not read."""
    run, meta, trace = read_run(path), read_meta(path), read_trace(path)
    if not trace or len(trace["time_s"]) == 0:
        raise MidspanError(f"{path}: holds no trace to be shown")
    nothing = np.full(len(trace["time_s"]), np.nan)
    names = ("time_s", "stress_mpa", "deflection_mm", "net_n", "strain")
    columns = {name: trace.get(STORED.get(name, name), nothing) for name in names}
    expected_n, band_n = expected_of(run.cards)
    result = {name: value for name, value in dict(meta.pop("result")).items() if name != "trace"}
    return Recording(
        columns=columns,
        events=run.events,
        cards=run.cards,
        result=result,
        meta=meta,
        expected_n=expected_n,
        band_n=band_n,
        sitting=sitting_of(path, meta),
        said=said_of(read_page(path)),
    )


def expected_of(cards: Mapping[str, Any]) -> tuple[float, tuple[float, float]]:
    """Median break load and P10-P90 band of the plan, N."""
    frame = FrameCard.model_validate(cards["frame"], strict=False)
    method = MethodCard.model_validate(cards["method"], strict=False)
    size = section_of(Specimen.model_validate(cards["specimen"], strict=False), method)
    spans = spans_of(fixture_by_name(frame, str(cards["run"]["fixture"])))
    band = band_of(method)
    low, median, high = (
        load_for_stress_n(stress, size, spans) for stress in (band.low_mpa, band.median_mpa, band.high_mpa)
    )
    return median, (low, high)


def sitting_of(path: Path, meta: Mapping[str, Any]) -> dict[str, Any]:
    """The bars of the same series up to this one, from the records beside it, in the order they were broken."""
    series = str(meta["series"])
    found = (
        found_records(path.absolute().parent.parent, series) if path.absolute().parent.name == series else []
    )
    bars: dict[str, dict[str, Any]] = {}
    for sealed in found:
        bars[sealed.specimen] = {
            "number": sealed.specimen,
            "state": "interrupted" if sealed.interrupted else "broken",
            "loading": sealed.loading,
            "record": sealed.record,
            "result": sealed.result,
            "specimen": None,
        }
    return {"series": series, "next": None, "bars": list(bars.values())}
