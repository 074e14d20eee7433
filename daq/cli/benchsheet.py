"""The bench sheet of a series as the window writes it: one bar at a time, whole or not at all, no other bar touched.

The sheet's own reader judges every row, so that what is written here reads everywhere else.
"""

from __future__ import annotations

import csv
import io
import os
from collections.abc import Mapping, Sequence
from pathlib import Path

from daq.cards.load import load_method
from daq.cards.method import MethodCard
from daq.cards.questions import specimen_slips
from daq.cards.series import Specimen
from daq.cards.sheet import read_sheet
from daq.cards.tree import read_text, read_tree
from daq.errors import CardError
from monitor.sheet import Judged

NUMBER = "number"
EXTRA = ("chamfer_mm", "length_mm")


class BenchSheet:
    """The sheet of one series card. Raises CardError or OSError where card or sheet do not read."""

    def __init__(self, series: Path) -> None:
        tree = read_tree(series)
        missing = [key for key in ("method", "sheet") if not isinstance(tree.get(key), str)]
        if missing:
            raise CardError((f"{series}: {missing[0]}: a file name is needed",))
        self.path = series.parent / str(tree["sheet"])
        self._method: MethodCard = load_method(series.parent / str(tree["method"]))

    @property
    def columns(self) -> tuple[str, ...]:
        """What is typed for each bar, in order."""
        names = ("width", "thickness") if self._method.section == "rectangle" else ("diameter",)
        readings = [f"{name}_{n}_mm" for name in names for n in range(1, self._method.readings + 1)]
        bore = ("inner_diameter_mm",) if self._method.section == "tube" else ()
        extra = EXTRA if self._method.section == "rectangle" else EXTRA[1:]
        return (NUMBER, *readings, *bore, *extra)

    def nominal(self) -> Mapping[str, float]:
        """Sizes the method expects, by the beginning of a column's name."""
        method = self._method
        found = {"width": method.width_mm, "thickness": method.thickness_mm, "diameter": method.diameter_mm}
        return {name: size for name, size in found.items() if size is not None}

    def rows(self) -> tuple[Mapping[str, str], ...]:
        """Cells of every bar, as they stand; empty where there is no sheet yet."""
        return tuple(dict(row) for row in self._read()[1])

    def judge(self, cells: Mapping[str, str]) -> Judged:
        """What is wrong with a row, and what should be looked at; nothing is written."""
        names = [name for name in self.columns if name == NUMBER or cells.get(name, "").strip()]
        row = {name: cells.get(name, "").strip().replace(",", ".") for name in names}
        found = read_sheet(text_of(names, [row], ","), self._method)
        if found.faults:
            return Judged(wrong=tuple(said(fault.line("", {})) for fault in found.faults))
        bar = found.specimens[0]
        slips = tuple(specimen_slips(bar, self._method))
        grave = tuple(f"{slip.key}: {slip.text}; {slip.suggestion}" for slip in slips if slip.must_correct)
        asked = tuple(
            f"{slip.key}: {slip.text}; {slip.suggestion}" for slip in slips if not slip.must_correct
        )
        return Judged(wrong=grave, asked=asked, mean_mm=means(bar))

    def write(self, cells: Mapping[str, str]) -> None:
        """Put one bar in: in its place where the number is there already, else as the last. CardError when refused."""
        judged = self.judge(cells)
        if judged.wrong:
            raise CardError(judged.wrong)
        names, rows, delimiter = self._read()
        number = cells[NUMBER].strip()
        names = names or [NUMBER]
        wanted = [name for name in self.columns if name not in names and cells.get(name, "").strip()]
        names += wanted
        mark = "," if delimiter == ";" else "."
        row = {
            name: cells.get(name, "").strip().replace(",", ".").removesuffix("mm").strip()
            for name in self.columns
        }
        row = {name: cell if name == NUMBER else cell.replace(".", mark) for name, cell in row.items()}
        place = next((place for place, old in enumerate(rows) if same(old[NUMBER], number)), None)
        if place is None:
            rows.append(row)
        else:
            rows[place] = {**rows[place], **row}
        self._replace(text_of(names, rows, delimiter))

    def _replace(self, text: str) -> None:
        """The whole file or none of it; what would not read is not written."""
        faults = read_sheet(text, self._method).faults
        if faults:
            raise CardError(tuple(said(fault.line(str(self.path), {})) for fault in faults))
        temp = self.path.with_name(f".{self.path.name}.part")
        with open(temp, "w", encoding="utf-8", newline="") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        os.replace(temp, self.path)

    def _read(self) -> tuple[list[str], list[dict[str, str]], str]:
        """Column names, rows, delimiter; nothing where there is no file or it is empty."""
        if not self.path.exists():
            return [], [], ","
        text = read_text(self.path)
        delimiter = ";" if ";" in text.split("\n", 1)[0] else ","
        rows = [row for row in csv.reader(io.StringIO(text, newline=""), delimiter=delimiter) if any(row)]
        if not rows:
            return [], [], delimiter
        names = [name.strip() for name in rows[0]]
        body = [dict(zip(names, (cell.strip() for cell in row), strict=False)) for row in rows[1:]]
        return names, [row for row in body if row.get(NUMBER)], delimiter


def text_of(names: Sequence[str], rows: Sequence[Mapping[str, str]], delimiter: str) -> str:
    """CSV text with a header."""
    out = io.StringIO(newline="")
    sheet = csv.writer(out, delimiter=delimiter, lineterminator="\n")
    sheet.writerow(names)
    for row in rows:
        sheet.writerow([row.get(name, "") for name in names])
    return out.getvalue()


def same(one: str, other: str) -> bool:
    """Numbers of bars that differ in case alone would be one file on some disks."""
    return one.casefold() == other.casefold()


def said(line: str) -> str:
    """A fault without the name of a file that the operator did not open."""
    return line.removeprefix(": ").strip()


def means(bar: Specimen) -> Mapping[str, float]:
    """Mean of each side, mm."""
    sides = {"width": bar.width_mm, "thickness": bar.thickness_mm}
    return {name: sum(readings) / len(readings) for name, readings in sides.items() if readings}
