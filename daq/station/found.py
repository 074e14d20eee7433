"""Sealed records as the station finds them on disk or hears of them from the archivist."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from daq.errors import MidspanError
from daq.record.read import read_meta
from daq.station.sitting import Sealed


def found_records(data: Path, series: str) -> list[Sealed]:
    """Every readable sealed record of a series; an unreadable one still uses up its number."""
    found = []
    for path in sorted((data / series).glob(f"{series}_*_*.h5")):
        specimen, loading = path.stem[len(series) + 1 :].rsplit("_", 1)
        if loading.isdigit():
            found.append(sealed_on_disk(path, specimen, int(loading)))
    return found


def sealed_on_disk(path: Path, specimen: str, loading: int) -> Sealed:
    try:
        meta: Mapping[str, Any] = read_meta(path)
    except MidspanError:
        return Sealed(
            specimen, loading, "", False, str(path), {"problem": "record does not read; see midspan verify"}
        )
    return Sealed(
        specimen,
        loading,
        str(meta["run_id"]),
        bool(meta["interrupted"]),
        str(path),
        dict(meta.get("result") or {}),
    )


def sealed_from_report(report: Mapping[str, Any]) -> Sealed:
    """From the archivist's "sealed" report."""
    return Sealed(
        str(report["specimen"]),
        int(report["loading"]),
        str(report["run_id"]),
        bool(report["interrupted"]),
        str(report["path"]),
        dict(report.get("result") or {}),
    )
