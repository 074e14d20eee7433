"""Messages between station and bench: every request survives the way, nonsense is refused by name."""

from __future__ import annotations

from typing import get_args

import pytest

from daq.bench.messages import CLASSES, decode, encode_request, encode_snapshot_request
from daq.watch import requests

EXAMPLES = (
    requests.StopRequest("Ines"),
    requests.OpenRun({"run_id": "r"}, {"number": "A"}, {"name": "m"}, "quarter", "because"),
    requests.StartRun(),
    requests.CloseRun("wrong bar"),
    requests.Jog(-1.0, 5.0),
    requests.ReturnCrosshead(2.0, 20.0),
    requests.Reset("Ines", looked=True),
    requests.Note("click"),
    requests.TightenLimit("force_n_max", 300.0),
    requests.Prove("Ines", polarity=True, stop_drill=False),
    requests.TakeSeat("Olaf", "Ines"),
    requests.CheckCell("A. Tester", 200.0),
    requests.TellFault("disk_low", "3 % free"),
    requests.FaultOver("disk_low"),
)


@pytest.mark.parametrize("request_", EXAMPLES, ids=lambda one: type(one).__name__)
def test_round_trip(request_: requests.Request) -> None:
    assert decode(encode_request(7, request_, 5)) == (7, request_, 5)


def test_every_request_has_an_example() -> None:
    known = {cls.__name__ for cls in get_args(requests.Request)}
    assert {type(one).__name__ for one in EXAMPLES} == set(CLASSES) == known


def test_snapshot() -> None:
    assert decode(encode_snapshot_request(3)) == (3, None, 0)


@pytest.mark.parametrize(
    "message",
    [
        b"",
        b"[]",
        b'{"id":"x"}',
        b'{"id":1,"ask":"Fly"}',
        b'{"id":1,"ask":"Jog","fields":{"speed":1}}',
        b"\xff",
        b"1",
    ],
)
def test_nonsense_is_refused(message: bytes) -> None:
    with pytest.raises(ValueError):
        decode(message)
