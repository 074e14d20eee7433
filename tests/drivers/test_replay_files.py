"""Recordings from files: the exported CSV form, and what is refused."""

import numpy as np
import pytest
from wire_frames import frame_of

from daq.errors import DriverOpenError, LinkClosed
from drivers.replay import Recorded, ReplayDriver, blocks_of, recorded_file

FRAME = frame_of(
    {"dialect": "lines", "lines": {}},
    [{"name": "force", "column": 1}, {"name": "cross-head", "column": 2, "unit": "mm"}],
)
TEXT = """index,time_s,force_counts,force_n,cross_head_counts,cross_head_mm,simulated
10,0.25,1.5,3.0,7.0,0.7,1
11,0.35,nan,nan,8.0,0.8,1
14,0.65,-2.0,-4.0,9.0,0.9,1
"""


def test_an_exported_table_is_read_back(tmp_path):
    path = tmp_path / "run.csv"
    path.write_text(TEXT, "utf-8")
    recorded = recorded_file(path, FRAME, 0)
    assert recorded.index.tolist() == [10, 11, 14]
    assert np.array_equal(recorded.counts, [[1.5, 7.0], [np.nan, 8.0], [-2.0, 9.0]], equal_nan=True)
    blocks = list(blocks_of(recorded, 0))
    assert [(block.first_index, block.count, block.gap_samples) for block in blocks] == [
        (10, 2, 0),
        (14, 1, 2),
    ]
    assert list(blocks_of(recorded, 0, rows_max=1))[1].gap_samples == 0


@pytest.mark.parametrize(
    ("text", "words"),
    [
        (TEXT.replace("force_counts", "load"), "no column force_counts"),
        (TEXT.replace("-2.0", "two"), "cannot be read"),
        ("", "no column index"),
    ],
)
def test_a_table_that_does_not_fit_is_refused(tmp_path, text, words):
    path = tmp_path / "run.csv"
    path.write_text(text, "utf-8")
    with pytest.raises(DriverOpenError, match=words):
        recorded_file(path, FRAME, 0)


def test_a_file_that_is_not_there_is_refused(tmp_path):
    with pytest.raises(DriverOpenError, match="cannot be read"):
        recorded_file(tmp_path / "none.csv", FRAME, 0)


def test_the_pace_is_that_of_the_recording_times_the_wish():
    """On a clock of our own: at pace 2 a recorded second lasts half a second; no read waits longer than asked."""
    recorded = Recorded(np.arange(100), np.arange(100) * 0.1, np.zeros((100, 2)))
    now = [50.0]
    waits: list[float] = []

    def wait(seconds: float) -> None:
        waits.append(seconds)
        now[0] += seconds

    driver = ReplayDriver(recorded, FRAME, pace=2.0, now_s=lambda: now[0], wait_s=wait)
    driver.open()
    assert driver.read(0.02).rows == 1
    assert driver.read(0.02) is None
    while not driver.ended:
        driver.read(0.02)
    assert now[0] - 50.0 == pytest.approx(9.9 / 2.0, abs=0.021)
    assert max(waits) <= 0.02 + 1e-12
    driver.stop()
    driver.close()
    with pytest.raises(LinkClosed):
        driver.read(0.0)
