"""The bench sheet page: a bar's number, its readings one field after the other, questions before it is kept.

Ahead for all bars, or just in time for the next one. A number that was broken already is not opened: what was recorded
changes only by a correction with name and reason.
"""

from __future__ import annotations

from collections.abc import Container, Mapping
from dataclasses import dataclass, field
from typing import Protocol

from PySide6.QtCore import Signal

from monitor.form import FieldWords, Form, number_in

SIZE_MM_MAX = 10_000.0
NUMBER = "number"
OPTIONAL = ("chamfer_mm", "length_mm")


@dataclass(frozen=True, slots=True)
class Judged:
    """wrong: refused; asked: to be confirmed by Enter once more; mean_mm: of each side."""

    wrong: tuple[str, ...] = ()
    asked: tuple[str, ...] = ()
    mean_mm: Mapping[str, float] = field(default_factory=dict)


class Sheet(Protocol):
    """Where bars are written down. Raises MidspanError or OSError."""

    @property
    def columns(self) -> tuple[str, ...]:
        """What is typed for each bar, in order."""

    def nominal(self) -> Mapping[str, float]:
        """Expected sizes by the beginning of a column's name, mm."""

    def rows(self) -> tuple[Mapping[str, str], ...]:
        """Every bar as it stands."""

    def judge(self, cells: Mapping[str, str]) -> Judged:
        """Nothing is written."""

    def write(self, cells: Mapping[str, str]) -> None:
        """One bar, whole or not at all."""


class SheetForm(Form):
    """kept: the number of a bar that has been written."""

    kept = Signal(str)

    def __init__(self) -> None:
        super().__init__("bench sheet", columns=3, scale=1.8)
        self._sheet: Sheet | None = None
        self._asked: tuple[str, ...] = ()
        self._broken: Container[str] = ()
        self.filled.connect(self._keep)
        self.changed.connect(self._typed_anew)

    def open_for(self, sheet: Sheet, broken: Container[str], number: str) -> None:
        """number: of the bar to begin with; its readings where it has some."""
        self._sheet, self._broken = sheet, broken
        self.lay([self._words(name, sheet.nominal()) for name in sheet.columns])
        self._show(number)

    def _show(self, number: str) -> None:
        assert self._sheet is not None
        rows = {row[NUMBER]: row for row in self._sheet.rows()}
        self._asked = ()
        self.title.setText(f"bench sheet: {len(rows)} bars measured   Enter goes on, Esc leaves")
        self.fill({NUMBER: number, **rows.get(number, {})})
        self.begin(NUMBER if not number else self.fields[1].words.name)

    def _words(self, name: str, nominal: Mapping[str, float]) -> FieldWords:
        if name == NUMBER:
            return FieldWords(name, "bar", self._check_number, "scan or type")
        side = name.split("_")[0]
        hint = (
            f"{nominal[side]:g}"
            if side in nominal
            else ("empty: the method's" if name == OPTIONAL[0] else "")
        )
        return FieldWords(
            name, name.removesuffix("_mm").replace("_", " ") + ", mm", self._check_size(name), hint
        )

    def _check_number(self, text: str) -> str:
        if not text:
            return "the number that is written on the bar"
        if text in self._broken:
            return f"{text} is broken already; its sizes change only by a correction (midspan note RECORD --correct)"
        return ""

    def _check_size(self, name: str) -> Checked:
        return Checked(optional=name in OPTIONAL, zero_allowed=name == OPTIONAL[0])

    def _typed_anew(self) -> None:
        self._asked = ()

    def _keep(self, values: Mapping[str, str]) -> None:
        """Refused: says why. Odd: asks, and keeps it at the next Enter. Else: kept, and on to the next bar."""
        assert self._sheet is not None
        judged = self._sheet.judge(values)
        if judged.wrong:
            self.say("not kept: " + "; ".join(judged.wrong))
            self.begin(self._field_of(judged.wrong[0]))
        elif judged.asked and judged.asked != self._asked:
            self._asked = judged.asked
            self.say("Is that so? Enter keeps it: " + "; ".join(judged.asked))
        else:
            self.kept.emit(values[NUMBER])

    def _field_of(self, told: str) -> str:
        """The field a fault speaks of; a side's first one where it speaks of the side."""
        names = [found.words.name for found in self.fields]
        sides = ("width", "thickness", "diameter")
        exact = [name for name in names if name in told]
        return next(iter(exact), next((f"{side}_1_mm" for side in sides if side in told), names[0]))

    def next_after(self, number: str) -> None:
        """On to the next bar: the number that follows is offered, marked to be typed or scanned over."""
        self._show("")
        self.fill({NUMBER: following(number)})
        self.begin(NUMBER)
        self.say(f"{number} is kept")


def following(number: str) -> str:
    """KL-09 -> KL-10; empty where a number does not end in figures."""
    head = number.rstrip("0123456789")
    figures = number[len(head) :]
    return f"{head}{int(figures) + 1:0{len(figures)}d}" if figures else ""


@dataclass(frozen=True, slots=True)
class Checked:
    """One size as typed."""

    optional: bool
    zero_allowed: bool

    def __call__(self, text: str) -> str:
        if not text and self.optional:
            return ""
        value = number_in(text, 0.0, SIZE_MM_MAX)
        if value is None or (value == 0.0 and not self.zero_allowed):
            return "a number in mm above 0, such as 4.003 or 4,003; another unit is never converted"
        return ""
