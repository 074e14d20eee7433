"""docs/simulator.md, written from the models: every key with unit, allowed values, default and meaning.

python -m simulator.doc > docs/simulator.md
"""

from __future__ import annotations

import sys
from typing import get_args

from daq.cards.doc import card_section
from simulator import hands
from simulator.card import SimulatorCard
from simulator.faults import MODELS, Fault
from simulator.specimen import InHand

INTRODUCTION = """# Simulator card

This page is made from the code (`python -m simulator.doc > docs/simulator.md`); a test fails when it is stale.

`midspan simulate FRAME_CARD --bars SIMULATOR_CARD` plays the machine of a frame card. The frame card says what
midspan believes of the machine: rows, rates, calibration, commands. The simulator card says what is true: the
bars, the drive, the sensors, and what goes wrong. Shipped examples (all invented) lie in `simulator/examples/`.
The same seed gives the same bytes.
"""
HANDS = """## Hands

`--hands PATH` opens a datagram socket for the hands of the person at the bench, one JSON object a line. Without
it a bar is put in whenever the last is broken and the crosshead is out of the way. midspan never uses this door.

    {lines}

`mount` takes these keys; a row of a bench sheet fits as it is:
"""
FAULTS = """## Misfortunes

Items of `faults`, and what `{"fault": {...}}` takes. Each waits for at most one anchor:
"""


def simulator_markdown() -> str:
    """The whole page."""
    said = (hands.__doc__ or "").split("\n\n", 1)[1].strip()
    parts = [
        INTRODUCTION,
        card_section("Simulator card", SimulatorCard),
        FAULTS,
        card_section("Every misfortune", Fault),
        *(card_section(", ".join(_kinds(model)), model, tuple(Fault.model_fields)) for model in MODELS),
        HANDS.replace("{lines}", said.replace("\n", "\n    ")),
        card_section("A bar in hand", InHand),
    ]
    return "\n".join(parts)


def _kinds(model: type[Fault]) -> tuple[str, ...]:
    return get_args(model.model_fields["kind"].annotation)


if __name__ == "__main__":
    sys.stdout.write(simulator_markdown())
