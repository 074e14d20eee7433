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
    )
}


def encode_request(number: int, request: Request) -> bytes:
    """One request as a datagram."""
    body = {"id": number, "ask": type(request).__name__, "fields": dataclasses.asdict(request)}
    return json.dumps(body, separators=(",", ":")).encode()


def encode_snapshot_request(number: int) -> bytes:
    """The station's heartbeat; answered with the watch's present values."""
    return json.dumps({"id": number, "ask": SNAPSHOT}, separators=(",", ":")).encode()


def decode(message: bytes) -> tuple[int, Request | None]:
    """(number, request); None for a snapshot. Raises ValueError on anything else, naming what is wrong."""
    body = json.loads(message)
    if not isinstance(body, dict) or not isinstance(body.get("id"), int):
        raise ValueError("not a numbered message")
    ask = body.get("ask")
    if ask == SNAPSHOT:
        return body["id"], None
    cls = CLASSES.get(str(ask))
    if cls is None:
        raise ValueError(f"no request is called {ask!r}")
    try:
        request: Request = cls(**body.get("fields", {}))
    except TypeError as error:
        raise ValueError(f"{ask}: {error}") from error
    return body["id"], request
