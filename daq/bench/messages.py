"""What the station says to the bench process and hears back: one JSON datagram each way. Pure.

To the bench: {"id": 7, "ask": "StartRun", "fields": {}} or {"id": 8, "ask": "snapshot"} (the station's heartbeat).
From it:      {"id": 7, "ok": true} or {"id": 7, "ok": false, "missing": ["..."]}; a snapshot comes as "snapshot".
"""

from __future__ import annotations

import dataclasses
import json
from collections.abc import Mapping
from typing import Any

from daq.watch import requests
from daq.watch.requests import Request

MESSAGE_BYTES_MAX = 65_536
SNAPSHOT = "snapshot"
TYPES: Mapping[str, type | tuple[type, ...]] = {
    "str": str,
    "bool": bool,
    "float": (int, float),
    "Mapping[str, Any]": dict,
}
CLASSES: Mapping[str, type[Any]] = {
    cls.__name__: cls
    for cls in (
        requests.StopRequest,
        requests.OpenRun,
        requests.StartRun,
        requests.CloseRun,
        requests.Jog,
        requests.ReturnCrosshead,
        requests.Reset,
        requests.Note,
        requests.TightenLimit,
        requests.Prove,
        requests.CheckCell,
        requests.TakeSeat,
        requests.TellFault,
        requests.FaultOver,
    )
}


def encode_request(number: int, request: Request, sent_ns: int) -> bytes:
    """One request as a datagram. sent_ns: monotonic clock, so that an old one is not obeyed."""
    fields = dataclasses.asdict(request)
    body = {"id": number, "ask": type(request).__name__, "sent_ns": sent_ns, "fields": fields}
    return json.dumps(body, separators=(",", ":")).encode()


def encode_snapshot_request(number: int) -> bytes:
    """The station's heartbeat; answered with the watch's present values."""
    return json.dumps({"id": number, "ask": SNAPSHOT}, separators=(",", ":")).encode()


def decode(message: bytes) -> tuple[int, Request | None, int]:
    """(number, request, sent_ns); request None for a snapshot. Raises ValueError on anything else, naming what is
    wrong.
    """
    try:
        body = json.loads(message)
    except RecursionError as error:
        raise ValueError("nested too deeply") from error
    if not isinstance(body, dict) or not isinstance(body.get("id"), int):
        raise ValueError("not a numbered message")
    ask = body.get("ask")
    if ask == SNAPSHOT:
        return body["id"], None, 0
    cls = CLASSES.get(str(ask))
    if cls is None:
        raise ValueError(f"no request is called {ask!r}")
    fields, sent_ns = body.get("fields", {}), body.get("sent_ns", 0)
    if not isinstance(fields, dict) or not isinstance(sent_ns, int):
        raise ValueError(f"{ask}: fields or sent_ns of the wrong type")
    check_types(cls, fields)
    try:
        request: Request = cls(**fields)
    except TypeError as error:
        raise ValueError(f"{ask}: {error}") from error
    return body["id"], request, sent_ns


def check_types(cls: type[Any], fields: Mapping[str, Any]) -> None:
    """Every field as its dataclass declares it; a bool is no number here."""
    for field in dataclasses.fields(cls):
        if field.name not in fields:
            continue
        value, declared = fields[field.name], str(field.type)
        if not isinstance(value, TYPES[declared]) or isinstance(value, bool) is not (declared == "bool"):
            raise ValueError(f"{cls.__name__}.{field.name}: {value!r} is not of the type {declared}")
