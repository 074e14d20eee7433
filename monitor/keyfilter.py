"""Where keys enter: a filter over the whole application, so that a stop is heard in every field, page and dialog.

A key-down passes here before any widget sees it. A stop leaves at once; everything else goes to the judge, and what the
judge calls typing goes on to the field that has the focus.
"""

from __future__ import annotations

import time
from collections.abc import Callable

from PySide6.QtCore import QEvent, QObject, Qt
from PySide6.QtGui import QKeyEvent
from PySide6.QtWidgets import QAbstractSpinBox, QApplication, QLineEdit, QPlainTextEdit

from monitor.keys import Deed, KeyJudge

TYPED_IN = (QLineEdit, QPlainTextEdit, QAbstractSpinBox)


def key_name(event: QKeyEvent) -> str:
    """One letter as typed, or Qt's own name of the key: "Escape", "Space", "F9"."""
    text = event.text()
    if len(text) == 1 and text.isprintable() and text != " ":
        return text
    try:
        return Qt.Key(event.key()).name.removeprefix("Key_")
    except ValueError:
        return ""


class KeyFilter(QObject):
    """Install it on the application. stop: called on key-down, before anything else; leave: Esc at rest in a field."""

    def __init__(
        self,
        judge: KeyJudge,
        *,
        stop: Callable[[str], None],
        leave: Callable[[], None],
        at_rest: Callable[[], bool],
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        super().__init__()
        self._judge = judge
        self._stop, self._leave, self._at_rest = stop, leave, at_rest
        self.clock = clock

    def eventFilter(self, watched: QObject, event: QEvent) -> bool:
        """True: nobody else sees it."""
        kind = event.type()
        if kind == QEvent.Type.KeyPress and isinstance(event, QKeyEvent):
            return self._down(event)
        if kind == QEvent.Type.KeyRelease and isinstance(event, QKeyEvent):
            self._judge.up(key_name(event), self.clock(), repeat=event.isAutoRepeat())
            return False
        if kind in (QEvent.Type.ApplicationDeactivate, QEvent.Type.WindowDeactivate):
            self._judge.forget()
        return super().eventFilter(watched, event)

    def _down(self, event: QKeyEvent) -> bool:
        name, typing = key_name(event), self._is_typing()
        deed = self._judge.down(
            name,
            self.clock(),
            repeat=event.isAutoRepeat(),
            typing=typing or self._in_dialog(),
            at_rest=self._at_rest(),
        )
        if deed is Deed.STOP:
            self._stop(f"operator's key {name}")
            return True
        if deed is Deed.LEAVE:
            if self._in_dialog():
                return False  # the dialog closes itself
            self._leave()
            return True
        return deed is Deed.NOTHING

    @staticmethod
    def _is_typing() -> bool:
        return isinstance(QApplication.focusWidget(), TYPED_IN)

    @staticmethod
    def _in_dialog() -> bool:
        return QApplication.activeModalWidget() is not None or QApplication.activePopupWidget() is not None
