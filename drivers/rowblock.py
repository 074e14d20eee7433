"""RowBlock: many text lines at once, by numpy. Certifies plain rows and their numbers; leaves every doubt
to RowText.

Numbers of at most 15 digits with a point are digits / 10^places: both exact in a float and divided once, so
rounded like any correct reader does (W. D. Clinger, "How to read floating point numbers accurately", 1990).
Everything longer, with an exponent or otherwise unusual is not certified.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
import numpy.typing as npt

from daq.stream.block import Floats
from drivers.checks import Indices, Octets, check_ranges
from drivers.rowtext import RowText, Want

Mask: TypeAlias = npt.NDArray[np.bool_]

DIGITS_MAX = 15
NO_POINT = -1
BLANKS = (9, 10, 11, 12, 13, 32)
_IS_BLANK = np.zeros(256, dtype=np.bool_)
_IS_BLANK[list(BLANKS)] = True
_HEX = np.full(256, 255, dtype=np.uint8)
for _text, _value in ((b"0123456789", 0), (b"ABCDEF", 10), (b"abcdef", 10)):
    _HEX[list(_text)] = np.arange(_value, _value + len(_text), dtype=np.uint8)
_LETTERS = np.zeros(256, dtype=np.bool_)
_LETTERS[[*range(65, 91), *range(97, 123)]] = True
_TENS: Floats = 10.0 ** np.arange(DIGITS_MAX + 2, dtype=np.float64)


@dataclass(frozen=True, slots=True)
class Certified:
    """start, stop: of each line in the text, without its end; plain: (n,) rows whose numbers stand in
    values (n, w)."""

    start: Indices
    stop: Indices
    plain: Mask
    values: Floats


@dataclass(frozen=True, slots=True)
class _Fields:
    """Field bounds of the certified candidates: (rows, fields) each; check_stop: end of what the check
    covers."""

    start: Indices
    stop: Indices
    check_stop: Indices


class RowBlock:
    """The block reader of one row grammar. `can_read` is False where the grammar is left to RowText
    altogether."""

    def __init__(self, grammar: RowText, line_end: bytes) -> None:
        self._grammar = grammar
        self._line_end = line_end
        self._point = ord("," if grammar.dialect.decimal_comma else ".")
        self._known_first = np.zeros(256, dtype=np.bool_)
        self._known_first[[reply[0] for reply in grammar.known]] = True
        self.can_read = len(grammar.separator) <= 1 and len(grammar.label_separator) <= 1

    def certify(self, text: bytes) -> Certified:
        """text: whole lines, each with its end."""
        octets = np.frombuffer(text, dtype=np.uint8)
        start, stop = self._lines(octets)
        plain = self._candidates(octets, start, stop)
        values = np.empty((len(start), len(self._grammar.wants)))
        rows = np.flatnonzero(plain)
        if len(rows):
            kept, found = self._read(octets, start[rows], stop[rows])
            plain[rows] = kept
            values[rows] = found
        return Certified(start, stop, plain, values)

    def _lines(self, octets: Octets) -> tuple[Indices, Indices]:
        end = self._line_end
        ends = octets == end[0]
        if len(end) == 2:
            ends = ends[:-1] & (octets[1:] == end[1])
        stop = np.flatnonzero(ends)
        start = np.empty_like(stop)
        start[0] = 0
        start[1:] = stop[:-1] + len(end)
        return start, stop

    def _candidates(self, octets: Octets, start: Indices, stop: Indices) -> Mask:
        grammar = self._grammar
        length = stop - start
        plain: Mask = (length <= grammar.dialect.line_bytes_max) & (length > len(grammar.prefix))
        for place, octet in enumerate(grammar.prefix):
            plain &= octets[np.minimum(start + place, stop)] == octet
        if not grammar.prefix:
            first = octets[start]
            plain &= ~self._known_first[first]
            if not grammar.label_separator:
                plain &= ~_LETTERS[first]
        return plain

    def _read(self, octets: Octets, start: Indices, stop: Indices) -> tuple[Mask, Floats]:
        """kept: (n,) rows certified; found: (n, w) their numbers."""
        grammar = self._grammar
        kept = np.ones(len(start), dtype=np.bool_)
        fields, counted = self._fields(octets, start + len(grammar.prefix), stop)
        kept &= counted
        found = np.full((len(start), len(grammar.wants)), np.nan)
        if fields is None:
            return np.zeros_like(kept), found
        chosen = np.flatnonzero(counted)
        good = np.ones(len(chosen), dtype=np.bool_)
        if grammar.check_digits:
            good &= self._check_matches(octets, start[chosen], fields)
        columns = self._columns(octets, fields)
        if grammar.label_separator:
            good &= self._labels_repeat(octets, fields)
        for number, (want, column) in enumerate(zip(grammar.wants, columns, strict=True)):
            if column is None:
                return np.zeros_like(kept), found
            value, read = self._numbers(octets, fields.start[:, column], fields.stop[:, column], want)
            found[chosen, number] = value
            good &= read
        kept[chosen] = good
        return kept, found

    # -- fields

    def _fields(self, octets: Octets, start: Indices, stop: Indices) -> tuple[_Fields | None, Mask]:
        """Bounds of the fields of all rows that have the usual number of them."""
        grammar = self._grammar
        if grammar.separator:
            marks = np.flatnonzero(octets == grammar.separator[0])
            ends = None
        else:
            marks, ends = self._tokens(octets, start, stop)
        low, high = np.searchsorted(marks, start), np.searchsorted(marks, stop)
        count = high - low
        usual = self._usual_count(count)
        counted = count == usual
        if usual < 1 and (grammar.check_digits or ends is not None):
            return None, np.zeros_like(counted)
        start, stop = start[counted], stop[counted]
        places = (
            marks[low[counted][:, None] + np.arange(usual)]
            if usual
            else np.empty((len(start), 0), dtype=np.intp)
        )
        if ends is None:
            begins = np.concatenate((start[:, None], places + 1), axis=1)
            finishes = np.concatenate((places, stop[:, None]), axis=1)
            check_stop = places[:, -1] if usual else stop
        else:
            begins, finishes = places, ends[low[counted][:, None] + np.arange(usual)]
            check_stop = finishes[:, -2] if usual > 1 else begins[:, 0]
        in_row = begins.shape[1] - (1 if grammar.check_digits else 0)
        if in_row < grammar.fields_min or in_row != (grammar.dialect.columns or in_row):
            return None, np.zeros_like(counted)
        return _Fields(begins, finishes, check_stop), counted

    def _tokens(self, octets: Octets, start: Indices, stop: Indices) -> tuple[Indices, Indices]:
        """Runs of non-blanks inside the rows; what lies between the rows (ends, prefixes, other lines) is
        no token."""
        inside = np.zeros(len(octets) + 1, dtype=np.int8)
        inside[start] += 1
        inside[stop] -= 1
        solid = (np.cumsum(inside[:-1]) > 0) & ~_IS_BLANK[octets]
        edge = np.diff(solid.astype(np.int8), prepend=np.int8(0), append=np.int8(0))
        return np.flatnonzero(edge == 1), np.flatnonzero(edge == -1)

    def _usual_count(self, count: Indices) -> int:
        grammar = self._grammar
        if grammar.dialect.columns is not None:
            marks_per_field_less = 1 if grammar.separator else 0
            return grammar.dialect.columns + (1 if grammar.check_digits else 0) - marks_per_field_less
        return int(np.bincount(count).argmax())

    def _check_matches(self, octets: Octets, start: Indices, fields: _Fields) -> Mask:
        grammar = self._grammar
        first, last = _trim(octets, fields.start[:, -1], fields.stop[:, -1])
        good: Mask = last - first == grammar.check_digits
        stated = np.zeros(len(start), dtype=np.uint32)
        for place in range(grammar.check_digits):
            digit = _HEX[octets[np.minimum(first + place, len(octets) - 1)]]
            good &= digit < 16
            stated = (stated << np.uint32(4)) | (digit & np.uint8(15))
        if not good.any():
            return good
        rows = np.flatnonzero(good)
        wanted = check_ranges(grammar.dialect.checksum, octets, start[rows], fields.check_stop[rows])
        good[rows] = wanted == stated[rows]
        return good

    # -- labels

    def _columns(self, octets: Octets, fields: _Fields) -> list[int | None]:
        """The field of each want, labels as in the first row (the others are compared with it)."""
        labels = [self._label_of(octets, fields, column) for column in range(fields.start.shape[1])]
        return [
            want.column
            if want.label is None
            else (labels.index(want.label) if want.label in labels else None)
            for want in self._grammar.wants
        ]

    def _label_of(self, octets: Octets, fields: _Fields, column: int) -> bytes | None:
        if not self._grammar.label_separator:
            return None
        field = octets[fields.start[0, column] : fields.stop[0, column]].tobytes()
        label, found, _ = field.partition(self._grammar.label_separator)
        return label.strip() if found else None

    def _labels_repeat(self, octets: Octets, fields: _Fields) -> Mask:
        """Rows whose labels stand, byte for byte, as in the first row, which has each label once."""
        good = np.ones(len(fields.start), dtype=np.bool_)
        mark = self._grammar.label_separator
        seen: set[bytes] = set()
        for column in range(fields.start.shape[1] - (1 if self._grammar.check_digits else 0)):
            field = octets[fields.start[0, column] : fields.stop[0, column]].tobytes()
            label, found, _ = field.partition(mark)
            if label.strip() in seen or not found:
                return np.zeros_like(good)
            seen.add(label.strip())
            for place, octet in enumerate(label + mark):
                good &= octets[np.minimum(fields.start[:, column] + place, fields.stop[:, column])] == octet
            value = fields.start[:, column] + len(label) + len(mark)
            good &= value <= fields.stop[:, column]
            fields.start[:, column] = np.minimum(value, fields.stop[:, column])
        return good

    # -- numbers

    def _numbers(self, octets: Octets, start: Indices, stop: Indices, want: Want) -> tuple[Floats, Mask]:
        start, stop = _trim(octets, start, stop)
        for unit in want.units:
            stop = self._without_unit(octets, start, stop, unit)
        negative = octets[start] == 45
        begin = start + (negative | (octets[start] == 43))
        value, read = _decimals(octets, begin, stop, self._point)
        return np.where(negative, -value, value), read

    def _without_unit(self, octets: Octets, start: Indices, stop: Indices, unit: bytes) -> Indices:
        here: Mask = stop - start > len(unit)
        for place, octet in enumerate(unit):
            here &= octets[np.maximum(stop - len(unit) + place, 0)] == octet
        if not here.any():
            return stop
        return _trim(octets, start, np.where(here, stop - len(unit), stop))[1]


def _trim(octets: Octets, start: Indices, stop: Indices) -> tuple[Indices, Indices]:
    """Without the blanks at both ends; at most DIGITS_MAX a side (more is left standing, thus no number)."""
    last = len(octets) - 1
    for _ in range(DIGITS_MAX):
        blank = (start < stop) & _IS_BLANK[octets[np.minimum(start, last)]]
        if not blank.any():
            break
        start = start + blank
    for _ in range(DIGITS_MAX):
        blank = (start < stop) & _IS_BLANK[octets[stop - 1]]
        if not blank.any():
            break
        stop = stop - blank
    return start, stop


def _decimals(octets: Octets, begin: Indices, stop: Indices, point: int) -> tuple[Floats, Mask]:
    """Unsigned decimals right-aligned in a matrix, one digit a column."""
    length = stop - begin
    plain: Mask = (length >= 1) & (length <= DIGITS_MAX + 1)
    if not plain.any():
        return np.full(len(begin), np.nan), plain
    width = int(length[plain].max())
    place = stop[:, None] + np.arange(-width, 0)
    text = np.where(place >= begin[:, None], octets[np.maximum(place, 0)], np.uint8(48))
    digit = text - np.uint8(48)
    points = text == point
    digit[points] = 0
    count = points.sum(axis=1)
    plain &= (digit < 10).all(axis=1) & (count <= 1) & (length - count >= 1) & (length - count <= DIGITS_MAX)
    decimals = np.where(count > 0, width - 1 - points.argmax(axis=1), NO_POINT)
    value = np.full(len(begin), np.nan)
    digits = digit.astype(np.float64)
    for places in np.unique(decimals[plain]).tolist():
        rows = np.flatnonzero(plain & (decimals == places))
        value[rows] = digits[rows] @ _weights(width, places) / _TENS[max(places, 0)]
    return value, plain


def _weights(width: int, places: int) -> Floats:
    """Power of ten of each column; the point's own column weighs nothing."""
    if places == NO_POINT:
        return _TENS[:width][::-1]
    return np.concatenate((_TENS[places : width - 1][::-1], [0.0], _TENS[:places][::-1]))
