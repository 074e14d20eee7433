"""Fields to be typed in, one after the other: Enter or Tab goes on, nothing is lost by a wrong one, no dialog opens.

Gauges and scanners that act as keyboards end with Enter and so go from field to field. What a field may hold is said
when it is wrong; the other fields keep what they have.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

from PySide6.QtCore import QEvent, Qt, Signal
from PySide6.QtGui import QKeyEvent
from PySide6.QtWidgets import QGridLayout, QLabel, QLineEdit, QVBoxLayout, QWidget

from monitor.paint import FAMILY
from monitor.palette import DARK, Theme
from monitor.sizes import Sizes, sizes_for

TEXT_MAX = 200
NUMBER = re.compile(r"[0-9]{1,6}(?:[.,][0-9]{1,6})?")


@dataclass(frozen=True, slots=True)
class FieldWords:
    """One field. check: text -> what is wrong with it, empty when nothing; empty text is judged too."""

    name: str
    label: str
    check: Callable[[str], str]
    hint: str = ""


class Field(QLineEdit):
    """Enter, Tab and Down go on; Up goes back."""

    onward = Signal(int)

    def __init__(self, words: FieldWords) -> None:
        super().__init__()
        self.words = words
        self.setMaxLength(TEXT_MAX)
        self.setPlaceholderText(words.hint)
        self.setAttribute(Qt.WidgetAttribute.WA_InputMethodEnabled, False)

    def event(self, event: QEvent) -> bool:
        """Tab belongs to the form, not to Qt's chain of focus."""
        if event.type() == QEvent.Type.KeyPress and isinstance(event, QKeyEvent):
            step = STEPS.get(event.key())
            if step is not None:
                self.onward.emit(step)
                return True
        return super().event(event)


STEPS = {
    Qt.Key.Key_Return.value: 1,
    Qt.Key.Key_Enter.value: 1,
    Qt.Key.Key_Tab.value: 1,
    Qt.Key.Key_Down.value: 1,
    Qt.Key.Key_Up.value: -1,
    Qt.Key.Key_Backtab.value: -1,
}


class Form(QWidget):
    """filled: all fields are right and the last one was left onward. changed: something was typed."""

    filled = Signal(dict)
    changed = Signal(dict)

    def __init__(self, title: str, columns: int = 1, scale: float = 1.35) -> None:
        super().__init__()
        self.theme: Theme = DARK
        self.sizes: Sizes = sizes_for(1080, 0.277)
        self.title, self.wrong = QLabel(title), QLabel("")
        self.fields: list[Field] = []
        self._labels: list[QLabel] = []
        self._columns, self._scale = columns, scale
        self.wrong.setWordWrap(True)
        self.title.setWordWrap(True)
        self._grid = QGridLayout()
        self._grid.setContentsMargins(0, 0, 0, 0)
        self._grid.setVerticalSpacing(3)
        self._grid.setHorizontalSpacing(10)
        layout = QVBoxLayout(self)
        layout.setContentsMargins(8, 4, 8, 4)
        layout.setSpacing(3)
        layout.addWidget(self.title)
        layout.addLayout(self._grid)
        layout.addWidget(self.wrong, 1)
        self.setAttribute(Qt.WidgetAttribute.WA_StyledBackground)

    def lay(self, fields: Sequence[FieldWords]) -> None:
        """Other fields; those that were there go."""
        for widget in (*self.fields, *self._labels):
            self._grid.removeWidget(widget)
            widget.deleteLater()
        self.fields, self._labels = [], []
        rows = -(-len(fields) // self._columns)
        for place, words in enumerate(fields):
            label, field = QLabel(words.label), Field(words)
            row, column = place % rows, 2 * (place // rows)
            self._grid.addWidget(label, row, column)
            self._grid.addWidget(field, row, column + 1)
            field.onward.connect(self._go)
            field.textEdited.connect(self._typed)
            self.fields.append(field)
            self._labels.append(label)
        self.dress(self.theme, self.sizes)

    def hasHeightForWidth(self) -> bool:
        """A sentence that wraps must not take room from the drawing."""
        return False

    def values(self) -> dict[str, str]:
        return {field.words.name: field.text().strip() for field in self.fields}

    def fill(self, values: Mapping[str, str]) -> None:
        for field in self.fields:
            field.setText(values.get(field.words.name, ""))
        self.wrong.setText("")

    def begin(self, name: str = "") -> None:
        """Focus on a field, the first where none is named."""
        for field in self.fields:
            if not name or field.words.name == name:
                field.setFocus()
                field.selectAll()
                return

    def say(self, text: str) -> None:
        self.wrong.setText(text)

    def _typed(self) -> None:
        self.wrong.setText("")
        self.changed.emit(self.values())

    def _go(self, step: int) -> None:
        """To the next field when this one is right; from the last one, when all are, the form is filled."""
        place = next((place for place, field in enumerate(self.fields) if field.hasFocus()), 0)
        wrong = self.fields[place].words.check(self.fields[place].text().strip())
        if wrong and step > 0:
            self.say(f"{self.fields[place].words.label}: {wrong}")
            self.fields[place].selectAll()
            return
        if place + step < len(self.fields):
            self.begin(self.fields[max(0, place + step)].words.name)
            return
        for field in self.fields:
            wrong = field.words.check(field.text().strip())
            if wrong:
                self.say(f"{field.words.label}: {wrong}")
                self.begin(field.words.name)
                return
        self.filled.emit(self.values())

    def dress(self, theme: Theme, sizes: Sizes) -> None:
        self.theme, self.sizes = theme, sizes
        size = round(min(self._scale * sizes.small_px, 0.6 * sizes.chief_px))
        self.setStyleSheet(
            f"QWidget {{ background: {theme.panel}; color: {theme.ink}; font: {size}px '{FAMILY}'; }}"
            f"QLineEdit {{ background: {theme.ground}; border: 2px solid {theme.edge}; padding: 1px 4px; }}"
            f"QLineEdit:focus {{ border: 3px solid {theme.trace}; }}"
        )


def number_in(text: str, low: float, high: float) -> float | None:
    """A typed number, point or comma, with or without mm; None where it is none or outside."""
    bare = text.strip().removesuffix("mm").strip()
    if not NUMBER.fullmatch(bare):
        return None
    value = float(bare.replace(",", "."))
    return value if low <= value <= high else None
