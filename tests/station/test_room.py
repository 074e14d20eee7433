"""Room on the disk, with its arithmetic, on real file systems."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from daq.bench.sizing import stream_bytes_per_s
from daq.cards.load import example_path, load_frame
from daq.errors import MidspanError
from daq.station.room import (
    AHEAD_BYTES_MAX,
    RUNS_MIN,
    bytes_ahead,
    check_start,
    free_bytes,
    judge,
    why_too_little,
)

FRAME = load_frame(example_path("kiln-lane-a.toml"))


def test_ten_of_the_longest_runs_must_have_room(tmp_path: Path) -> None:
    free, rate = shutil.disk_usage(tmp_path).free, stream_bytes_per_s(FRAME)
    said = why_too_little(tmp_path, FRAME, 2.0 * free / (RUNS_MIN * rate))
    assert "5.0 of the longest runs" in said and f"{rate / 1e3:.0f} kB/s" in said


def test_one_run_less_than_ten_and_a_disk_nearly_full_are_too_little() -> None:
    run_s, rate = 100.0, 1e5
    ten = int(RUNS_MIN * run_s * rate)
    assert judge("it", ten, 2 * ten, rate, run_s) == ""
    assert "10.0 of the longest" in judge("it", ten - 1, 2 * ten, rate, run_s)
    assert judge("it", ten, 20 * ten, rate, run_s) == "", "exactly a twentieth"
    assert "4.8 % of it, at least 5 %" in judge("it", ten, 21 * ten, rate, run_s)
    assert judge("it", 0, 0, rate, 0.0).startswith("it: 0 MB free")


def test_room_ahead_is_a_minute_and_bounded() -> None:
    assert bytes_ahead(FRAME) == pytest.approx(60 * stream_bytes_per_s(FRAME), rel=1e-6)
    link = FRAME.links[0].model_copy(update={"rate_hz": 50_000.0})
    assert bytes_ahead(FRAME.model_copy(update={"links": (link,)})) == AHEAD_BYTES_MAX


def test_a_folder_that_is_not_there_is_named(tmp_path: Path) -> None:
    check_start(tmp_path, FRAME)
    with pytest.raises(MidspanError, match="nothere: No such file or directory: name another with --data"):
        free_bytes(tmp_path / "nothere")
