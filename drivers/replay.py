"""Replay: a recorded loading as a driver, from a sealed record, an exported CSV file or arrays. Moves
nothing.

Samples come out in recorded order with their recorded numbers, gaps and counts, at recorded pace times
`pace`.
"""

from __future__ import annotations

import csv
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

import numpy as np
import numpy.typing as npt

from daq.cards.derived import channels_of
from daq.cards.frame import FrameCard
from daq.errors import DriverOpenError, LinkClosed
from daq.stream.block import Block, Floats
from daq.stream.rundata import RunData
from drivers.decoded import Decoded
from drivers.driver import ChannelUnit

ROWS_AT_ONCE = 1000
CLOCK_S = 1e-9
CSV_BYTES_MAX = 2_000_000_000


@dataclass(frozen=True, slots=True, eq=False)
class Recorded:
    """The samples of one link: (n,) numbers, (n,) times, (n, k) counts in the card's channel order."""

    index: npt.NDArray[np.int64]
    time_s: Floats
    counts: Floats


def recorded_run(run: RunData, frame: FrameCard, link_number: int) -> Recorded:
    """One link's samples of a run; every channel of the link must be in it."""
    names = [channel.name for channel in channels_of(frame, link_number)]
    missing = [name for name in names if name not in run.channels]
    if missing or not names:
        why = f"the recording has no channel {', '.join(missing) or 'of this link'}"
        raise DriverOpenError(why, driver="replay", device=frame.links[link_number].name)
    first = run.channels[names[0]]
    counts = np.column_stack([run.channels[name].counts for name in names])
    return Recorded(first.index, first.time_s, counts)


def recorded_csv(path: Path, frame: FrameCard, link_number: int) -> Recorded:
    """One link's samples of an exported CSV file: columns index, time_s and <channel>_counts."""
    names = [f"{channel.name.replace('-', '_')}_counts" for channel in channels_of(frame, link_number)]
    try:
        if path.stat().st_size > CSV_BYTES_MAX:
            raise DriverOpenError("larger than 2 GB", driver="replay", device=str(path))
        with open(path, encoding="utf-8", newline="") as file:
            header = next(csv.reader(file), [])
            missing = [name for name in ("index", "time_s", *names) if name not in header]
            if missing:
                why = f"no column {', '.join(missing)}: is it an exported file of this frame?"
                raise DriverOpenError(why, driver="replay", device=str(path))
            wanted = [header.index(name) for name in ("index", "time_s", *names)]
            table = np.loadtxt(file, delimiter=",", usecols=wanted, ndmin=2, dtype=np.float64)
    except (OSError, ValueError) as error:
        raise DriverOpenError(f"cannot be read: {error}", driver="replay", device=str(path)) from error
    return Recorded(table[:, 0].astype(np.int64), table[:, 1], table[:, 2:])


def recorded_file(path: Path, frame: FrameCard, link_number: int) -> Recorded:
    """A sealed record or an exported CSV file, by its ending."""
    if path.suffix.lower() == ".csv":
        return recorded_csv(path, frame, link_number)
    from daq.record.read import read_run  # HDF5 is wanted here only

    return recorded_run(read_run(path), frame, link_number)


def blocks_of(recorded: Recorded, source: int, rows_max: int = ROWS_AT_ONCE) -> Iterator[Block]:
    """The blocks of a recording, none over a gap, none longer than rows_max."""
    step = np.diff(recorded.index)
    edges = np.flatnonzero(step != 1) + 1
    starts = [0, *edges.tolist(), len(recorded.index)]
    for start, stop in pairwise(starts):
        gap = 0 if start == 0 else max(int(step[start - 1]) - 1, 0)
        for at in range(start, stop, rows_max):
            rows = slice(at, min(at + rows_max, stop))
            yield Block(
                source,
                int(recorded.index[at]),
                recorded.time_s[rows].copy(),
                recorded.counts[rows].copy(),
                gap if at == start else 0,
            )


class ReplayDriver:
    """A recording at `pace` times its own speed; times are the recorded ones. After its end there is
    silence."""

    def __init__(
        self,
        recorded: Recorded,
        frame: FrameCard,
        link_number: int = 0,
        *,
        pace: float = 1.0,
        now_s: Callable[[], float] = time.monotonic,
        wait_s: Callable[[float], None] = time.sleep,
    ) -> None:
        assert pace > 0.0
        self._recorded = recorded
        self._frame = frame
        self._number = link_number
        time_s = recorded.time_s
        self._due_s = (time_s - time_s[0]) / pace if len(time_s) else time_s
        self._now_s = now_s
        self._wait_s = wait_s
        self._at = 0
        self._started_s = 0.0
        self._is_open = False

    @property
    def channels(self) -> tuple[ChannelUnit, ...]:
        return tuple(
            ChannelUnit(channel.name, channel.unit) for channel in channels_of(self._frame, self._number)
        )

    @property
    def ended(self) -> bool:
        return self._at >= len(self._recorded.index)

    def open(self) -> None:
        self._is_open = True
        self._at = 0
        self._started_s = self._now_s()

    def read(self, timeout_s: float) -> Decoded | None:
        """What is due by now, waiting for it at most timeout_s."""
        if not self._is_open:
            raise LinkClosed("used while closed", driver="replay", device=self._frame.name)
        now_s = self._now_s()
        until_s = now_s + max(timeout_s, 0.0)
        due_s = until_s if self.ended else min(self._started_s + float(self._due_s[self._at]), until_s)
        if due_s > now_s:
            self._wait_s(due_s - now_s)
        played_s = (
            self._now_s() - self._started_s + CLOCK_S
        )  # a sum and its difference may differ in the last bit
        stop = int(np.searchsorted(self._due_s, played_s, side="right"))
        stop = min(max(stop, self._at), self._at + ROWS_AT_ONCE)
        if stop <= self._at:
            return None
        rows = slice(self._at, stop)
        part = Recorded(self._recorded.index[rows], self._recorded.time_s[rows], self._recorded.counts[rows])
        blocks = list(blocks_of(part, self._number))
        gap = self._gap_before(self._at)
        if gap:
            first = blocks[0]
            blocks[0] = Block(first.source, first.first_index, first.time_s, first.counts, gap)
        self._at = stop
        return Decoded(tuple(blocks))

    def stop(self) -> None:
        """There is no machine; the recording goes on."""
        if not self._is_open:
            raise LinkClosed("used while closed", driver="replay", device=self._frame.name)

    def close(self) -> None:
        self._is_open = False

    def _gap_before(self, at: int) -> int:
        index = self._recorded.index
        return 0 if at == 0 else max(int(index[at] - index[at - 1]) - 1, 0)
