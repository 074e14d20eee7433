"""Comparing: what is stored against what comes out again; every difference is one line. Pure.

Equal means the same bits. `relative`: for records that were made on another platform, where the last bits of a sum may
differ: numbers of the result may then lie so far apart, blocks and events never.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from daq.recompute.decoding import Rows
from daq.stream.block import Floats

WORDS_MAX = 200


@dataclass(frozen=True, slots=True)
class Difference:
    """what: where it stands; stored and recomputed in words. of_words: no number, and no number gone."""

    what: str
    stored: str
    recomputed: str
    of_words: bool = False

    def __str__(self) -> str:
        return f"{self.what}: stored {self.stored}, recomputed {self.recomputed}"


def rows_compared(
    link: str, stored: Rows, again: Rows, *, numbers_known: bool, first: int
) -> Iterator[Difference]:
    """numbers_known: index and time can be told again. first: rows of the lead-in, which are left out where not."""
    count = len(stored.index) - (0 if numbers_known else first)
    if len(again.index) < count or (numbers_known and len(again.index) != count):
        yield Difference(f"link {link}: rows", str(count), str(len(again.index)))
        return
    kept, made = slice(len(stored.index) - count, None), slice(len(again.index) - count, None)
    yield from arrays_compared(f"link {link}: counts", stored.counts[kept], again.counts[made])
    if not numbers_known:
        steps = np.diff(stored.index[kept]), np.diff(again.index[made])
        yield from arrays_compared(f"link {link}: steps of the numbering", *steps)
        return
    yield from arrays_compared(f"link {link}: index", stored.index, again.index)
    yield from arrays_compared(f"link {link}: time_s", stored.time_s, again.time_s)
    if stored.gaps != again.gaps:
        yield Difference(f"link {link}: gaps (row, missing)", _short(stored.gaps), _short(again.gaps))


def arrays_compared(what: str, stored: npt.NDArray[Any], again: npt.NDArray[Any]) -> Iterator[Difference]:
    """The first row that has other bits, and how many have."""
    if stored.shape != again.shape:
        yield Difference(f"{what}: shape", str(stored.shape), str(again.shape))
        return
    if stored.tobytes() == again.tobytes():
        return
    other = _bits(stored) != _bits(again)
    rows = np.flatnonzero(other if other.ndim == 1 else other.any(axis=1))
    row = int(rows[0])
    yield Difference(
        f"{what}: {len(rows)} of {len(stored)} rows, the first is row {row}",
        str(stored[row].tolist()),
        str(again[row].tolist()),
    )


def _bits(values: npt.NDArray[Any]) -> npt.NDArray[np.int64]:
    return np.ascontiguousarray(values).view(np.int64)


def traces_compared(stored: Mapping[str, Floats], again: Mapping[str, Floats]) -> Iterator[Difference]:
    for name, values in stored.items():
        if name in again:
            yield from arrays_compared(f"/trace/{name}", values, np.asarray(again[name], dtype="<f8"))
        else:
            yield Difference(f"/trace/{name}", f"{len(values)} rows", "not there")


def results_compared(
    stored: object, again: object, *, relative: float, what: str = "result"
) -> Iterator[Difference]:
    """Every stored value against the one that comes out; what only a newer midspan gives is no difference."""
    if isinstance(stored, Mapping) and isinstance(again, Mapping):
        for key, value in stored.items():
            if key not in again:
                yield Difference(f"{what}.{key}", _short(value), "not there")
            else:
                yield from results_compared(value, again[key], relative=relative, what=f"{what}.{key}")
    elif isinstance(stored, list | tuple) and isinstance(again, list | tuple):
        if len(stored) != len(again):
            yield Difference(what, _short(stored), _short(again), of_words=True)
            return
        for place, pair in enumerate(zip(stored, again, strict=True)):
            yield from results_compared(*pair, relative=relative, what=f"{what}[{place}]")
    elif not _equal(stored, again, relative):
        words = what.endswith(".schema") or not any(isinstance(each, int | float) for each in (stored, again))
        yield Difference(what, _short(stored), _short(again), of_words=words)


def _equal(stored: object, again: object, relative: float) -> bool:
    if isinstance(stored, bool) or isinstance(again, bool) or not isinstance(again, int | float):
        return stored is again or (type(stored) is type(again) and stored == again)
    if not isinstance(stored, int | float):
        return False
    return stored == again or abs(stored - again) <= relative * max(abs(stored), abs(again))


def added(stored: Mapping[str, Any], again: Mapping[str, Any]) -> tuple[str, ...]:
    """Names that only the result of this version has."""
    return tuple(key for key in again if key not in stored)


def events_compared(
    stored: Sequence[Mapping[str, Any]], again: Sequence[Mapping[str, Any]]
) -> Iterator[Difference]:
    """/events against the entries of the stream."""
    for place, pair in enumerate(zip(stored, again, strict=False)):
        if pair[0] != pair[1]:
            yield Difference(f"/events row {place}", _short(pair[0]), _short(pair[1]))
            return
    if len(stored) != len(again):
        yield Difference("/events: rows", str(len(stored)), str(len(again)))


def _short(value: object) -> str:
    text = str(value)
    return text if len(text) <= WORDS_MAX else f"{text[:WORDS_MAX]}..."
