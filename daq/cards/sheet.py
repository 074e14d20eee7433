"""The bench sheet: a CSV table of bars with one row a bar. Reads and refuses; never converts, never fills in.

number,width_1_mm,width_2_mm,width_3_mm,thickness_1_mm,...,chamfer_mm,length_mm,batch,note
Delimiter comma or semicolon; a decimal comma only where the delimiter is a semicolon.
"""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass

from daq.cards.faults import Fault, one_line, show
from daq.cards.method import MethodCard
from daq.cards.names import has_control, name_fault
from daq.cards.series import Specimen

ROWS_MAX = 2000
DIMENSION_MM_MAX = 10_000.0
TEXT_COLUMNS = {"batch": 80, "note": 200}
NUMBER = re.compile(r"[+-]?[0-9]{1,9}(?:[.,][0-9]{1,9})?")
UNIT_SUFFIX = re.compile(r"\s*mm$")


class _BadCell(ValueError):
    """A cell that is refused: allowed and what to do."""

    def __init__(self, allowed: str, do: str) -> None:
        super().__init__(allowed)
        self.allowed, self.do = allowed, do


@dataclass(frozen=True, slots=True)
class Sheet:
    """What was read: the bars that could be read, and every fault."""

    specimens: tuple[Specimen, ...]
    faults: tuple[Fault, ...]


@dataclass(frozen=True, slots=True)
class _Columns:
    """Column names of one kind of bar: readings by dimension, in order."""

    readings: Mapping[str, tuple[str, ...]]
    needed: tuple[str, ...]
    known: frozenset[str]


def read_sheet(text: str, method: MethodCard) -> Sheet:
    """All bars of a sheet for this method."""
    delimiter = ";" if ";" in text.split("\n", 1)[0] else ","
    try:
        rows = _rows(text, delimiter)
    except csv.Error as error:
        do = "save the sheet again as CSV, text in double quotes where it holds the delimiter"
        return Sheet((), (Fault(("sheet",), "CSV text", do, one_line(str(error))),))
    if not rows:
        return Sheet(
            (), (Fault(("sheet",), "a line of column names and one row for each bar", "add them", "empty"),)
        )
    columns = _columns(method)
    (_, header), body = rows[0], rows[1:]
    names = [name.strip() for name in header]
    faults = list(_header_faults(names, columns, method))
    if not faults and not body:
        faults.append(Fault(("sheet",), "one row for each bar", "add the bars", "no rows"))
    if len(body) > ROWS_MAX:
        faults.append(Fault(("sheet",), f"at most {ROWS_MAX} bars", "split the series", f"{len(body)} rows"))
    if faults:
        return Sheet((), tuple(faults))
    return _read_rows(body, names, columns, method, decimal_comma=delimiter == ";")


def reading_mm(text: str, *, decimal_comma: bool = True) -> float:
    """One reading of a gauge in mm, as typed at the bench. ValueError with one clear line when refused."""
    try:
        return _reading(text, decimal_comma=decimal_comma)
    except _BadCell as bad:
        raise ValueError(f"reading = {show(text)}: {bad.allowed}: {bad.do}") from bad


def _rows(text: str, delimiter: str) -> list[tuple[int, list[str]]]:
    """(line number, cells) of every row that is not blank."""
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=delimiter, strict=True)
    found = []
    for cells in reader:
        if any(cell.strip() for cell in cells):
            found.append((reader.line_num, cells))
    return found


def _columns(method: MethodCard) -> _Columns:
    names = {"rectangle": ("width", "thickness")}.get(method.section, ("diameter",))
    count = method.readings
    readings = {name: tuple(f"{name}_{n}_mm" for n in range(1, count + 1)) for name in names}
    needed = ["number", *(column for columns in readings.values() for column in columns)]
    optional = {"length_mm", *TEXT_COLUMNS}
    if method.section == "rectangle":
        optional.add("chamfer_mm")
    if method.section == "tube":
        needed.append("inner_diameter_mm")
    return _Columns(readings, tuple(needed), frozenset({*needed, *optional}))


def _header_faults(names: list[str], columns: _Columns, method: MethodCard) -> Iterator[Fault]:
    for place, name in enumerate(names, start=1):
        at = (f"column {place}",)
        if name not in columns.known:
            known = ", ".join((*columns.needed, *sorted(columns.known.difference(columns.needed))))
            allowed = f"a column of a {method.section} with {method.readings} readings: {known}"
            yield Fault(at, allowed, _column_hint(name), show(name))
        elif name in names[: place - 1]:
            yield Fault(at, "every column once", "remove one of the two", show(name))
    for name in columns.needed:
        if name not in names:
            yield Fault(("sheet",), f"a column {name}", "add this column", f"no column {name}")


def _column_hint(name: str) -> str:
    if name.endswith(("_in", "_inch", "_cm", "_m", "_um")):
        return "measure or convert in millimetres; the unit is in the name of the column"
    return "rename or remove this column"


def _read_rows(
    body: list[tuple[int, list[str]]],
    names: list[str],
    columns: _Columns,
    method: MethodCard,
    *,
    decimal_comma: bool,
) -> Sheet:
    specimens: list[Specimen] = []
    faults: list[Fault] = []
    first_line: dict[str, int] = {}
    for line, cells in body:
        if len(cells) != len(names):
            do = "correct the row; with a decimal comma the delimiter is a semicolon"
            value = f"{len(cells)} cells"
            faults.append(Fault((f"line {line}",), f"{len(names)} cells, as in the first line", do, value))
            continue
        row = _Row(line, dict(zip(names, (cell.strip() for cell in cells), strict=True)), decimal_comma)
        specimen = row.specimen(columns, method)
        number = row.cells["number"]
        first = first_line.setdefault(number.casefold(), line)
        if number and first != line:
            row.faults.append(
                row.fault("number", f"a number of its own; line {first} has this one", "renumber")
            )
        faults.extend(row.faults)
        if specimen is not None and not row.faults:
            specimens.append(specimen)
    return Sheet(tuple(specimens), tuple(faults))


class _Row:
    """One row while it is read; collects the faults of its cells, so that all are told at once."""

    def __init__(self, line: int, cells: Mapping[str, str], decimal_comma: bool) -> None:
        self.line, self.cells, self.decimal_comma = line, cells, decimal_comma
        self.faults: list[Fault] = []

    def specimen(self, columns: _Columns, method: MethodCard) -> Specimen | None:
        """The bar of this row, or None when a cell was refused."""
        fault = name_fault(self.cells["number"])
        if fault is not None:
            self.faults.append(self.fault("number", fault, "renumber the bar"))
        sizes = {name: self._readings(found) for name, found in columns.readings.items()}
        thickness_mm = sizes.get("thickness") or sizes.get("diameter") or ()
        width_mm = sizes.get("width", ())
        chamfer_mm, length_mm = self._optional("chamfer_mm"), self._optional("length_mm")
        inner_mm = self._optional("inner_diameter_mm") or 0.0
        if method.section == "tube" and not self.cells.get("inner_diameter_mm"):
            self.faults.append(self.fault("inner_diameter_mm", "a diameter > 0 mm", "measure the bore"))
        texts = {key: self._text(key, limit) for key, limit in TEXT_COLUMNS.items()}
        if self.faults:
            return None
        self._judge_sizes(method, (*width_mm, *thickness_mm), chamfer_mm, length_mm, inner_mm)
        if self.faults:
            return None
        return Specimen(
            number=self.cells["number"],
            width_mm=width_mm,
            thickness_mm=thickness_mm,
            inner_diameter_mm=inner_mm,
            chamfer_mm=chamfer_mm,
            length_mm=length_mm,
            **texts,
        )

    def fault(self, column: str, allowed: str, do: str) -> Fault:
        """A fault of one cell of this row."""
        return Fault((f"line {self.line}, {column}",), allowed, do, show(self.cells.get(column, "")))

    def _readings(self, columns: tuple[str, ...]) -> tuple[float, ...]:
        found = (self._number(column, zero=False) for column in columns)
        return tuple(value for value in found if value is not None)

    def _optional(self, column: str) -> float | None:
        return self._number(column, zero=column == "chamfer_mm") if self.cells.get(column) else None

    def _number(self, column: str, *, zero: bool) -> float | None:
        try:
            return _reading(self.cells[column], decimal_comma=self.decimal_comma, zero_allowed=zero)
        except _BadCell as bad:
            self.faults.append(self.fault(column, bad.allowed, bad.do))
            return None

    def _text(self, column: str, limit: int) -> str:
        text = self.cells.get(column, "")
        if len(text) > limit or has_control(text):
            allowed = f"text of at most {limit} characters without control characters"
            self.faults.append(self.fault(column, allowed, "shorten or retype it"))
        return text

    def _judge_sizes(
        self,
        method: MethodCard,
        sides_mm: tuple[float, ...],
        chamfer_mm: float | None,
        length_mm: float | None,
        inner_mm: float,
    ) -> None:
        smallest = min(sides_mm)
        if chamfer_mm is not None and 2.0 * chamfer_mm >= smallest:
            allowed = f"less than {smallest / 2.0:g} mm, half the smaller side"
            self.faults.append(self.fault("chamfer_mm", allowed, "measure it again, in mm"))
        if length_mm is not None and length_mm <= method.support_span_mm:
            allowed = f"more than the support span of {method.support_span_mm:g} mm"
            self.faults.append(self.fault("length_mm", allowed, "measure it again, in mm"))
        if method.section == "tube" and inner_mm >= smallest:
            allowed = f"less than the outer diameter of {smallest:g} mm"
            self.faults.append(self.fault("inner_diameter_mm", allowed, "measure it again, in mm"))


def _reading(text: str, *, decimal_comma: bool, zero_allowed: bool = False) -> float:
    """A number in mm; a trailing 'mm' is allowed, any other unit is refused."""
    bare = UNIT_SUFFIX.sub("", text.strip())
    if not bare:
        raise _BadCell("a number in mm", "measure and enter it; no cell is filled in by itself")
    if not NUMBER.fullmatch(bare):
        raise _BadCell("a number in mm, such as 4.003", "type digits only; another unit is never converted")
    if "," in bare and not decimal_comma:
        raise _BadCell("a decimal point", "with a decimal comma the delimiter of the sheet is a semicolon")
    value = float(bare.replace(",", "."))
    if value < 0.0 or (value == 0.0 and not zero_allowed):
        raise _BadCell("a number > 0 mm" if not zero_allowed else "a number >= 0 mm", "measure again")
    if value > DIMENSION_MM_MAX:
        raise _BadCell(f"at most {DIMENSION_MM_MAX:g} mm", "measure again, in mm")
    return value
