"""Decoding rate of both dialects, against a bare numpy parse of the same bytes in the same run.

Processor time of this process, the shortest of several tries taken in turn with the floor. Floors: packets,
numpy.frombuffer of the same fields copied to float64 without looking at sync, check or counter; lines,
numpy.loadtxt (and numpy.fromstring for one long chunk) of the same numbers with prefix and check already cut off.
The decoder does what the floor does not: framing, resynchronisation, check, counter, gaps, sample times.
"""

from __future__ import annotations

import io
import warnings
from collections.abc import Callable

import numpy as np

from benchmarks.harness import Report, least_s
from daq.cards.frame import FrameCard
from daq.cards.load import example_path, load_frame
from drivers.registry import decoder_for, encoder_for

NAME = "decoding"
ROWS, ROWS_QUICK = 20_000, 5_000
AT_ONCE = (1, 2, 10, 64, 1_000, 0)  # rows to a read; 0: all in one


def run(report: Report) -> None:
    rows, repeats = (ROWS_QUICK, 3) if report.quick else (ROWS, 9)
    measure(report, "lines", "kiln-lane-a.toml", rows, repeats)
    measure(report, "packets", "kiln-lane-b.toml", rows, repeats)


def measure(report: Report, dialect: str, card: str, rows: int, repeats: int) -> None:
    """One shipped frame card, its rows cut into reads of different sizes."""
    frame = load_frame(example_path(card))
    counts = np.rint(np.random.default_rng(1).normal(0.0, 20_000.0, (rows, 2)))
    encoder = encoder_for(frame, 0)
    coded = [encoder.encode(counts[row : row + 1], first_counter=row) for row in range(rows)]
    works: dict[str, Callable[[], object]] = {}
    floors = packets_floors(b"".join(coded)) if dialect == "packets" else lines_floors(coded)
    works.update(floors)
    for at_once in AT_ONCE:
        size = at_once or rows
        pieces = [b"".join(coded[at : at + size]) for at in range(0, rows, size)]
        works[str(at_once)] = lambda pieces=pieces: feed_all(frame, pieces)
    least = least_s(works, repeats)
    floor_name = next(iter(floors))
    for name in floors:
        report.add(NAME, f"{dialect}: {name}", rows / least[name], "rows/s", count=rows)
    for at_once in AT_ONCE:
        label = f"{dialect}: {at_once or 'all'} rows to a read"
        spent_us = least[str(at_once)] / rows * 1e6
        report.add(
            NAME,
            label,
            spent_us,
            "us/row",
            floor=least[floor_name] / rows * 1e6,
            floor_name=floor_name,
            note=f"{1e6 / spent_us:,.0f} rows/s",
        )


def feed_all(frame: FrameCard, pieces: list[bytes]) -> None:
    decoder = decoder_for(frame, 0)
    for number, piece in enumerate(pieces):
        decoder.feed(piece, 1.0 + number * 1e-3)


def packets_floors(stream: bytes) -> dict[str, Callable[[], object]]:
    fields = [("s", "V2"), ("c", "<u2"), ("f", "V3"), ("p", "<i4"), ("st", "u1"), ("check", "<u2")]

    def parse() -> np.ndarray:
        rows = np.frombuffer(stream, np.dtype(fields))
        values = np.empty((len(rows), 4))
        octets = rows["f"].copy().view(np.uint8).reshape(-1, 3)
        values[:, 0] = octets[:, 0] + 256.0 * octets[:, 1] + 65536.0 * octets[:, 2].view(np.int8)
        for column, name in enumerate(("p", "c", "st"), 1):
            values[:, column] = rows[name]
        return values

    return {"numpy.frombuffer": parse}


def lines_floors(coded: list[bytes]) -> dict[str, Callable[[], object]]:
    text = "\n".join(row[1:].rpartition(b",")[0].decode() for row in coded)
    flat = text.replace("\n", ",")

    def from_string() -> np.ndarray:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # its binary mode is deprecated, the text mode is not
            return np.fromstring(flat, dtype=float, sep=",")

    return {
        "numpy.loadtxt": lambda: np.loadtxt(io.StringIO(text), delimiter=","),
        "numpy.fromstring": from_string,
    }
