"""Decode rates of the shipped frames against floors measured in the same run, in processor time.

    python benchmarks/decode_rates.py

Floors: packets, numpy.frombuffer of the same fields copied to float64 without looking at sync or check; lines,
numpy.loadtxt of the same numbers without prefix and check. The ratio is what counts; the rate depends on the computer.
"""

from __future__ import annotations

import io
import time
from collections.abc import Callable

import numpy as np

from daq.cards.frame import FrameCard
from daq.cards.load import example_path, load_frame
from drivers.registry import decoder_for, encoder_for

ROWS = 20_000
REPEATS = 7


def best_s(work: Callable[[], object]) -> float:
    """Shortest processor time of several tries."""
    times = []
    for _ in range(REPEATS):
        start_s = time.process_time()
        work()
        times.append(time.process_time() - start_s)
    return min(times)


def feed_all(frame: FrameCard, pieces: list[bytes]) -> None:
    decoder = decoder_for(frame, 0)
    for number, piece in enumerate(pieces):
        decoder.feed(piece, 1.0 + number * 1e-3)


def packets_floor(stream: bytes) -> np.ndarray:
    fields = [("s", "V2"), ("c", "<u2"), ("f", "V3"), ("p", "<i4"), ("st", "u1"), ("check", "<u2")]
    rows = np.frombuffer(stream, np.dtype(fields))
    values = np.empty((len(rows), 4))
    octets = rows["f"].copy().view(np.uint8).reshape(-1, 3)
    values[:, 0] = octets[:, 0] + 256.0 * octets[:, 1] + 65536.0 * octets[:, 2].view(np.int8)
    for column, name in enumerate(("p", "c", "st"), 1):
        values[:, column] = rows[name]
    return values


def lines_floor(text: str) -> np.ndarray:
    return np.loadtxt(io.StringIO(text), delimiter=",")


def report(name: str) -> None:
    frame = load_frame(example_path(name))
    counts = np.rint(np.random.default_rng(1).normal(0.0, 20_000.0, (ROWS, 2)))
    encoder = encoder_for(frame, 0)
    rows = [encoder.encode(counts[row : row + 1], first_counter=row) for row in range(ROWS)]
    stream = b"".join(rows)
    if frame.links[0].dialect == "packets":
        floor_s = best_s(lambda: packets_floor(stream))
    else:
        text = "\n".join(row[1:].rpartition(b",")[0].decode() for row in rows)
        floor_s = best_s(lambda: lines_floor(text))
    print(f"{name}: floor {floor_s / ROWS * 1e6:.3f} us a row")
    for at_once in (1, 2, 10, 64, 200, 1000, ROWS):
        pieces = [b"".join(rows[at : at + at_once]) for at in range(0, ROWS, at_once)]
        spent_s = best_s(lambda pieces=pieces: feed_all(frame, pieces))
        print(
            f"  {at_once:6d} rows at once: {spent_s / ROWS * 1e6:7.3f} us a row, {ROWS / spent_s:10.0f} rows/s, "
            f"{spent_s / floor_s:6.1f} x floor"
        )


if __name__ == "__main__":
    report("kiln-lane-a.toml")
    report("kiln-lane-b.toml")
