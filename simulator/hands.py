"""The simulated person's hands: what is done at the bench, as JSON lines. Never used by midspan.

{"mount": {"number": "A-07", "thickness_mm": 3.0}}  clear the fixture and put in a bar
{"shield": "open"} {"shield": "shut"}               the guard door
{"emergency_stop": "pressed"} / "released"          {"drive": "faulty"} / "sound"
{"raise": true}                                     crosshead to its start, from the machine's own panel
{"fault": {"kind": "glitch", "size": 400.0}}        a misfortune, now
{"clear": true}                                     all misfortunes end
{"query": true}                                     the truth; only where a truth file was asked for
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import TypeAlias

from pydantic import TypeAdapter, ValidationError

from daq.cards.frame import InputName
from simulator.faults import AnyFault
from simulator.specimen import InHand
from simulator.virtual import VirtualWire

LINE_BYTES_MAX = 8192
SWITCHES: Mapping[tuple[str, object], tuple[InputName, bool]] = {
    ("shield", "open"): ("shield_open", True),
    ("shield", "shut"): ("shield_open", False),
    ("emergency_stop", "pressed"): ("emergency_stop", True),
    ("emergency_stop", "released"): ("emergency_stop", False),
    ("drive", "faulty"): ("drive_fault", True),
    ("drive", "sound"): ("drive_fault", False),
}
FAULT: TypeAdapter[AnyFault] = TypeAdapter(AnyFault)
Answer: TypeAlias = dict[str, object]


class Hands:
    """Does one line at a time. `truthful`: may answer `query`."""

    def __init__(self, wire: VirtualWire, *, truthful: bool) -> None:
        self._wire = wire
        self._truthful = truthful

    def do(self, line: bytes) -> Answer:
        """Do it and say what was done, or why not. Never raises on what it is given."""
        if len(line) > LINE_BYTES_MAX:
            return {"refused": f"a line has at most {LINE_BYTES_MAX} bytes"}
        try:
            asked = json.loads(line)
        except (ValueError, RecursionError) as error:
            return {"refused": f"not JSON: {error}"}
        if not isinstance(asked, dict) or len(asked) != 1:
            return {"refused": "one object with one key a line"}
        [(key, value)] = asked.items()
        self._wire.settle(self._wire.now_s)
        try:
            return self._do(key, value)
        except ValidationError as error:
            return {"refused": "; ".join(_where(dict(fault)) for fault in error.errors())}
        except ValueError as error:
            return {"refused": str(error)}

    def _do(self, key: str, value: object) -> Answer:
        machine = self._wire.machine
        if key == "mount":
            bar = machine.mount(InHand.model_validate_json(json.dumps(value)))
            return {"mounted": bar.number}
        if key == "fault":
            fault = FAULT.validate_json(json.dumps(value))
            machine.strike(fault)
            return {"fault": fault.kind}
        if (key, value) == ("raise", True):
            machine.raise_crosshead()
            return {"raised": True}
        if (key, value) == ("clear", True):
            self._wire.clear()
            return {"cleared": True}
        if (key, value) == ("query", True):
            return self._truth() if self._truthful else {"refused": "no truth file was asked for"}
        if isinstance(value, str) and (key, value) in SWITCHES:
            machine.switch(*SWITCHES[key, value])
            return {key: value}
        return {"refused": f"{key}: not understood"}

    def _truth(self) -> Answer:
        machine = self._wire.machine
        bar = machine.bar
        return {
            "time_s": machine.now_s,
            "position_mm": machine.position_mm,
            "speed_mm_s": machine.speed_mm_s,
            "force_n": machine.force_n,
            "specimen": bar.number if bar is not None else None,
            "broken": machine.broken,
            "inputs": machine.inputs(),
            **self._wire.counts(),
        }


def _where(fault: Mapping[str, object]) -> str:
    place = fault["loc"]
    assert isinstance(place, tuple)
    return f"{'.'.join(str(part) for part in place)}: {fault['msg']}"
