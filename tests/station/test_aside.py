"""Work that hangs on a disk holds up neither the loop nor the end; the trace is encoded once for all."""

from __future__ import annotations

import asyncio
import json
import os
from pathlib import Path

import numpy as np
import pytest

from daq.errors import RecordDamaged, Refused
from daq.station.aside import AT_ONCE_MAX, Aside
from daq.station.tracetext import TraceText


def read(path: Path) -> str:
    """A FIFO without a writer: the call hangs in the kernel, as on a network share that has gone."""
    return path.read_text("utf-8")


def fifo(folder: Path, name: str) -> Path:
    os.mkfifo(folder / name)
    return folder / name


def test_what_hangs_is_refused_and_the_loop_goes_on(tmp_path: Path) -> None:
    path = fifo(tmp_path, "hangs")

    async def play() -> int:
        aside, turns = Aside(), 0
        asked = asyncio.create_task(aside.do("series", "the share", lambda: read(path), 0.05))
        while not asked.done():
            turns += 1
            await asyncio.sleep(0)
        with pytest.raises(Refused, match="the share does not answer"):
            await asked
        return turns

    assert asyncio.run(play()) > 10  # and run() has ended although the call still hangs
    path.open("w").close()


def test_results_and_errors_come_through_unchanged(tmp_path: Path) -> None:
    def damaged() -> None:
        raise RecordDamaged("cut", first_bad="front")

    async def play() -> None:
        aside = Aside()
        assert await aside.do("series", "it", lambda: 7, 5.0) == 7
        with pytest.raises(RecordDamaged, match="cut"):
            await aside.do("series", "it", damaged, 5.0)
        with pytest.raises(Refused, match="it: No such file"):
            await aside.do("series", "it", lambda: read(tmp_path / "nothere"), 5.0)

    asyncio.run(play())


def test_hanging_calls_are_bounded(tmp_path: Path) -> None:
    paths = [fifo(tmp_path, f"hangs{number}") for number in range(AT_ONCE_MAX)]

    async def play() -> None:
        aside = Aside()
        for path in paths:
            with pytest.raises(Refused, match="within"):
                await aside.do("room", "it", lambda path=path: read(path), 0.001)  # type: ignore[misc]
        with pytest.raises(Refused, match="wait for a disk already"):
            await aside.do("room", "it", lambda: 1, 1.0)

    asyncio.run(play())
    for path in paths:
        path.open("w").close()


def test_a_growing_trace_is_the_same_text_as_encoded_at_once() -> None:
    table = np.random.default_rng(3).normal(size=(500, 2))
    table[7, 1] = np.nan
    grown, rows = TraceText(), (0, 1, 17, 17, 300, 500)
    for count in rows:
        columns = {"time_s": table[:count, 0], "stress_mpa": table[:count, 1]}
        text = grown.json(1, columns)
        assert text == TraceText().json(1, columns)
    found = json.loads(text)
    assert found["time_s"] == table[:, 0].tolist() and found["stress_mpa"][7] is None
    assert json.loads(grown.json(2, {"time_s": table[:3, 0]})) == {"time_s": table[:3, 0].tolist()}
    assert json.loads(grown.json(3, {})) == {}


def test_what_was_encoded_is_not_encoded_again() -> None:
    """The second look at a trace that has not grown must not touch its values: these would not be the same text."""
    text, column = TraceText(), np.array([1.0, 2.0])
    first = text.json(1, {"time_s": column})
    column[0] = 5.0
    assert text.json(1, {"time_s": column}) == first
