"""Asks: the operator's commands as requests to the bench. Pure but for the wall clock's label of a run."""

from __future__ import annotations

import datetime as dt
from collections.abc import Mapping
from typing import Any

from daq.cards.load import LoadedSeries
from daq.cards.series import Specimen
from daq.errors import Refused
from daq.version import VERSION
from daq.watch import requests
from daq.watch.requests import Request


def plain_request(command: str, words: Mapping[str, Any], operator: str) -> Request:
    """Commands that go to the bench as they are."""
    if command == "start":
        return requests.StartRun()
    if command == "close":
        return requests.CloseRun(str(words.get("reason", "")) or "operator")
    if command == "check_cell":
        return requests.CheckCell(operator, float(words["weight_n"]))
    if command == "jog":
        return requests.Jog(float(words["distance_mm"]), float(words["speed_mm_min"]))
    if command == "return":
        return requests.ReturnCrosshead(float(words["distance_mm"]), float(words["speed_mm_min"]))
    if command == "reset":
        return requests.Reset(operator, looked=bool(words.get("looked", False)))
    if command == "note":
        return requests.Note(str(words["text"])[:400])
    if command == "tighten":
        return requests.TightenLimit(str(words["key"]), float(words["value"]))
    raise Refused(command, ("no such command",))


def open_run(
    loaded: LoadedSeries,
    specimen: Specimen,
    loading: int,
    run_id: str,
    operator: str,
    tare_override_reason: str,
) -> requests.OpenRun:
    """The bar is called: everything its record has to say of where it comes from."""
    card = loaded.card
    run = {
        "run_id": run_id,
        "series": card.name,
        "specimen": specimen.number,
        "loading": loading,
        "operator": operator,
        "material": card.material,
        "temperature_c": card.temperature_c,
        "humidity_percent": card.humidity_percent,
        "utc": utc_now(),
        "local": dt.datetime.now().astimezone().isoformat(timespec="milliseconds"),
        "version": VERSION,
    }
    return requests.OpenRun(
        run=run,
        specimen=specimen.model_dump(mode="json"),
        method=loaded.method.model_dump(mode="json"),
        fixture=card.fixture,
        tare_override_reason=tare_override_reason,
    )


def utc_now() -> str:
    return dt.datetime.now(dt.UTC).isoformat(timespec="milliseconds")
