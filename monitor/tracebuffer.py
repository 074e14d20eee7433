"""The trace of one run, bounded: rows in time order, thinned by extremes when they become too many. Pure.

Neither a one-sample spike nor an unloading branch is ever hidden: of every stretch the first, the last, the lowest and
the highest row stay, by load and by displacement, in the order in which they came. The newest rows are kept whole
beside it, for the look at the break.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import numpy.typing as npt

from daq.stream.block import Floats

COLUMNS = ("time_s", "stress_mpa", "deflection_mm", "net_n", "strain")
TIME, STRESS, DEFLECTION, LOAD, STRAIN = range(len(COLUMNS))
ROWS_MAX = 1 << 17  # 131,072 rows of 5 numbers: 5 MB
RECENT_ROWS_MAX = 1 << 16  # 1.3 s at 50 kS/s
POINTS_PER_PIXEL = 2.0
KEPT_PER_STRETCH = 6

Indexes = npt.NDArray[np.int64]


class TraceBuffer:
    """Feed it the trace updates of one run; take from it what is to be drawn."""

    def __init__(self, rows_max: int = ROWS_MAX) -> None:
        assert rows_max >= 64
        self._rows = np.empty((len(COLUMNS), rows_max))
        self._index = np.zeros(rows_max, dtype=np.int64)  # number of each kept row among all ever taken
        self._length = 1  # rows of which a stretch is made now
        self._count = 0
        self._recent: list[Floats] = []
        self._recent_rows = 0
        self.seen = 0  # rows ever taken

    def __len__(self) -> int:
        return self._count

    def clear(self) -> None:
        self._count = self._recent_rows = self.seen = 0
        self._length = 1
        self._recent.clear()

    def take(self, columns: Mapping[str, Floats]) -> None:
        """Rows of one update; a column that is not there is NaN."""
        count = len(columns["time_s"]) if "time_s" in columns else 0
        if not count:
            return
        nothing = np.full(count, np.nan)
        block = np.vstack([np.asarray(columns.get(name, nothing), dtype=np.float64) for name in COLUMNS])
        self._keep_recent(block)
        for start in range(0, count, self._rows.shape[1] // 2):
            self._append(block[:, start : start + self._rows.shape[1] // 2])

    def _append(self, block: Floats) -> None:
        count, room = block.shape[1], self._rows.shape[1]
        index = np.arange(self.seen, self.seen + count)
        self.seen += count
        if self._length > 1:
            chosen = group_extremes(index // self._length, (block[LOAD], block[DEFLECTION]))
            index, block = index[chosen], block[:, chosen]
        while self._count + len(index) > room:
            self._shrink()
        self._rows[:, self._count : self._count + len(index)] = block
        self._index[self._count : self._count + len(index)] = index
        self._count += len(index)

    def _shrink(self) -> None:
        """Thin what is kept, evenly over the run: first what updates had cut to pieces, then by longer stretches."""
        while True:
            kept = self._rows[:, : self._count]
            chosen = group_extremes(
                self._index[: self._count] // self._length, (kept[LOAD], kept[DEFLECTION])
            )
            if len(chosen) <= self._rows.shape[1] // 2:
                break
            self._length *= 2
        self._rows[:, : len(chosen)] = kept[:, chosen]
        self._index[: len(chosen)] = self._index[chosen]
        self._count = len(chosen)

    def _keep_recent(self, block: Floats) -> None:
        self._recent.append(block)
        self._recent_rows += block.shape[1]
        while len(self._recent) > 1 and self._recent_rows - self._recent[0].shape[1] > RECENT_ROWS_MAX:
            self._recent_rows -= self._recent.pop(0).shape[1]

    def column(self, place: int) -> Floats:
        """One column as kept; not to be changed."""
        view = self._rows[place, : self._count]
        view.flags.writeable = False
        return view

    def recent(self, from_s: float, until_s: float) -> Floats:
        """(5, n): every row as it came within these times, of the newest rows."""
        if not self._recent:
            return np.empty((len(COLUMNS), 0))
        table = np.concatenate(self._recent, axis=1)
        chosen = (table[TIME] >= from_s) & (table[TIME] <= until_s)
        within: Floats = table[:, chosen]
        return within

    def along(self) -> int:
        """Which column lies along a stress trace: strain, else deflection, else time."""
        for place in (STRAIN, DEFLECTION):
            if self._count and np.isfinite(self._rows[place, self._count - 1]):
                return place
        finite = np.isfinite(self._rows[STRAIN, : self._count])
        return STRAIN if finite.any() else TIME

    def drawn(self, x: int, y: int, width_px: int) -> tuple[Floats, Floats]:
        """Two columns thinned to at most two points a pixel, in time order."""
        return thin_xy(self.column(x), self.column(y), width_px)

    def row_at(self, time_s: float) -> int | None:
        """The kept row nearest to a time."""
        if not self._count:
            return None
        times = self._rows[TIME, : self._count]
        place = int(np.searchsorted(times, time_s))
        near = [place for place in (place - 1, place) if 0 <= place < self._count]
        return min(near, key=lambda row: abs(float(times[row]) - time_s))


def thin_xy(x: Floats, y: Floats, width_px: int) -> tuple[Floats, Floats]:
    """(n,), (n,) -> at most two points a pixel, extremes of both kept, order kept."""
    points_max = max(64, int(POINTS_PER_PIXEL * width_px))
    if len(x) <= points_max:
        return x, y
    chosen = extremes((y, x), points_max // KEPT_PER_STRETCH)
    return x[chosen], y[chosen]


def extremes(columns: tuple[Floats, ...], stretches: int) -> Indexes:
    """Rows that are first, last, lowest or highest of equal stretches, in order. NaN counts as lowest: a hole stays
    visible.
    """
    count = len(columns[0])
    stretches = max(1, min(stretches, count))
    length = -(-count // stretches)
    begins = np.arange(0, count, length)
    kept = [begins, np.append(begins[1:] - 1, count - 1)]
    whole = count // length * length
    for column in columns:
        parts = column[:whole].reshape(-1, length)
        low = np.where(np.isnan(parts), -np.inf, parts)
        kept += [begins[: len(parts)] + low.argmin(axis=1), begins[: len(parts)] + low.argmax(axis=1)]
        if whole < count:
            rest = np.where(np.isnan(column[whole:]), -np.inf, column[whole:])
            kept += [np.array([whole + rest.argmin()]), np.array([whole + rest.argmax()])]
    return np.unique(np.concatenate(kept))


def group_extremes(group: Indexes, columns: tuple[Floats, ...]) -> Indexes:
    """First, last, lowest and highest row of each group, in order; group (n,) never falls."""
    begins = np.flatnonzero(np.diff(group, prepend=group[0] - 1))
    ends = np.append(begins[1:], len(group)) - 1
    kept = [begins, ends]
    for column in columns:
        order = np.lexsort((np.where(np.isnan(column), -np.inf, column), group))
        kept += [order[begins], order[ends]]
    return np.unique(np.concatenate(kept))
