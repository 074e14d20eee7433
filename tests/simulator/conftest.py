"""Cards of the simulator's tests: quiet by default, so that what is measured is exact."""

from __future__ import annotations

from collections.abc import Callable
from importlib import resources
from pathlib import Path
from typing import Any

import pytest

from daq.cards.frame import FrameCard
from daq.cards.load import load_frame
from simulator.card import SimulatorCard, simulator_from

MakeCard = Callable[..., SimulatorCard]
MakeFrame = Callable[..., FrameCard]

BAR = {"modulus_gpa": 300.0, "poisson_ratio": 0.25, "width_mm": 4.0, "thickness_mm": 3.0}


@pytest.fixture
def make_card() -> MakeCard:
    """A card from the parts that matter; the bar breaks at no force unless `strength` is mounted."""

    def make(**parts: Any) -> SimulatorCard:
        table = {"card": "simulator", "name": "test", "seed": 5, "bar": {**BAR, **parts.pop("bar", {})}}
        return simulator_from({**table, **parts})

    return make


@pytest.fixture(scope="session")
def shipped() -> Path:
    return Path(str(resources.files("daq.cards") / "examples"))


@pytest.fixture
def make_frame(shipped: Path) -> MakeFrame:
    """A shipped frame card; changes of its first link by name."""

    def make(name: str = "kiln-lane-a", **link: Any) -> FrameCard:
        frame = load_frame(shipped / f"{name}.toml")
        first = frame.links[0].model_copy(update=link)
        return frame.model_copy(update={"links": (first, *frame.links[1:])})

    return make
