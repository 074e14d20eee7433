"""Puts the window together: Qt checked first, the daemon's client, the stop line, the series' figures."""

from __future__ import annotations

import os
import signal
import sys
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager, contextmanager
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING

from daq.cli.benchsheet import BenchSheet
from daq.cli.figures import series_words
from daq.cli.keeper import Keeper
from daq.errors import MidspanError
from daq.station.client import Client
from daq.station.places import Places
from daq.station.stopline import stop_frame
from monitor.qtlibs import check_window, here

if TYPE_CHECKING:
    from PySide6.QtWidgets import QApplication

    from monitor.errands import Desk
    from monitor.setting import Setting
    from monitor.window import Window

PICTURE_TURNS = 4  # events to be worked off before the picture is taken


@dataclass(frozen=True, slots=True)
class Person:
    """Who sits at the window. operator empty: watching only."""

    operator: str = ""
    series: Path | None = None
    instead: bool = False


def application(*, offscreen: bool = False) -> QApplication:
    """Qt, or a MidspanError that says what is missing."""
    check_window(here(), offscreen=offscreen)
    if offscreen:
        os.environ["QT_QPA_PLATFORM"] = "offscreen"
    from PySide6.QtCore import qInstallMessageHandler
    from PySide6.QtWidgets import QApplication

    qInstallMessageHandler(pass_on)
    found = QApplication.instance()
    return found if isinstance(found, QApplication) else QApplication(sys.argv[:1])


def pass_on(kind: object, context: object, text: str) -> None:
    """What Qt says, but for a line of its off-screen platform that means nothing."""
    del kind, context
    if "propagateSizeHints" not in text:
        sys.stderr.write(f"midspan watch: {text}\n")


def watch_frame(places: Places, person: Person, setting: Setting, seconds: float | None) -> None:
    """The window of a served frame, until it is closed."""
    app = application()
    from monitor.window import Outside, Window

    with Client(places) as feed:
        outside = Outside(
            feed=feed,
            stop=lambda who: stop_frame(places.frame, who),
            open_desk=desk_of(places),
            figures=series_words,
            operator=person.operator,
            series=person.series.absolute() if person.series else None,
            instead=person.instead,
            notes=Keeper(),
            open_sheet=BenchSheet,
        )
        show(app, Window(outside, setting), seconds)


def desk_of(places: Places) -> Callable[[], AbstractContextManager[Desk]]:
    """A client of its own for commands; opened in the thread that uses it."""

    @contextmanager
    def opened() -> Iterator[Desk]:
        with Client(places) as client:
            yield client

    return opened


def replay(path: Path, setting: Setting, seconds: float | None) -> None:
    """A sealed record, played."""
    app = application()
    from daq.cli.recording import recording_of
    from monitor.replay import ReplayWindow

    show(app, ReplayWindow(recording_of(path), series_words, setting), seconds)


def show(app: QApplication, window: Window, seconds: float | None) -> None:
    from PySide6.QtCore import QTimer

    def leave(*_: object) -> None:
        window.close()

    def fail(kind: type[BaseException], error: BaseException, trace: TracebackType | None) -> None:
        """A window that is broken goes away; it must not go on showing old numbers."""
        sys.__excepthook__(kind, error, trace)
        window.close()
        app.exit(1)

    for kind in (signal.SIGHUP, signal.SIGINT, signal.SIGTERM):
        signal.signal(kind, leave)  # heard within one turn of the window
    sys.excepthook = fail
    window.resize(1600, 900)
    window.begin()
    window.showMaximized()
    if seconds is not None:
        QTimer.singleShot(round(1000 * seconds), window.close)
    if app.exec():
        raise MidspanError(
            "the window broke and was closed; the frame and its record are not touched by that"
        )


def picture(path: Path, target: Path, setting: Setting, size: tuple[int, int], at_s: float | None) -> None:
    """The view of a record as a PNG, rendered off-screen; at_s: seconds since the run was opened, None: its end."""
    app = application(offscreen=True)
    from daq.cli.recording import recording_of
    from monitor.notebook import ghost_of
    from monitor.replay import ReplayWindow

    window = ReplayWindow(recording_of(path), series_words, setting)
    window.resize(*size)
    window.show()
    for bar in (window.scene.sitting or {}).get("bars", ()):
        if bar["number"] != window.scene.ending.specimen and bar["state"] == "broken":
            window.trace.add_ghost(ghost_of(Path(bar["record"])))
    window.player.playing = False
    window.go(window.player.seek(window.player.recording.end_s if at_s is None else at_s))
    for _ in range(PICTURE_TURNS):
        app.processEvents()
        window.still()
    if not window.grab().save(str(target), "PNG"):
        raise MidspanError(f"{target}: the picture cannot be written; name a .png in a folder that exists")
    window.close()
