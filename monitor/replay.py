"""A sealed record in the operator's own view: played, scrubbed, or as one picture. No frame listens to this window."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from typing import Any

from daq.stream.updates import Update
from monitor.board import board_of
from monitor.errands import NO_FRAME, no_desk
from monitor.orders import Orders
from monitor.pages import REPLAY_KEYS, KeysPage
from monitor.playback import Player, Recording
from monitor.presenter import Line, Tone
from monitor.setting import Setting
from monitor.window import Outside, Window

REPLAY_MARK = "REPLAY OF A RECORD"


class NoFeed:
    """Nothing comes by itself."""

    lost_updates = 0

    def updates(self, timeout_s: float) -> Iterator[Update]:
        del timeout_s
        return iter(())


class ReplayOrders(Orders):
    """Keys of a replay."""

    def begin(self) -> None:
        """Nobody to ask."""

    def look(self) -> None:
        """The player knows all."""

    def stop(self, who: str) -> None:
        del who
        self._window.tell(NO_FRAME, Tone.PLAIN, 3.0)

    def obey(self, key: str) -> None:
        window = self._window
        assert isinstance(window, ReplayWindow)
        moves: Mapping[str, Callable[[], None]] = {
            "p": window.toggle_play,
            "f": window.to_break,
            ",": lambda: window.go(window.player.step(-1)),
            ".": lambda: window.go(window.player.step(1)),
            "-": lambda: window.player.change_speed(-1),
            "+": lambda: window.player.change_speed(1),
        }
        if key in moves:
            moves[key]()
        elif key in "?stdq":
            super().obey(key)


class ReplayWindow(Window):
    """Plays one recording."""

    def __init__(
        self, recording: Recording, figures: Callable[[Sequence[float]], str], setting: Setting
    ) -> None:
        self.player = Player(recording)
        self._at_end = False
        super().__init__(Outside(NoFeed(), lambda who: NO_FRAME, no_desk, figures), setting)
        self.setWindowTitle("midspan watch - replay")
        self._turned_s = time.monotonic()
        self.go(self.player.look())

    def make_orders(self, outside: Outside) -> Orders:
        return ReplayOrders(self, outside)

    def make_keys_page(self) -> KeysPage:
        return KeysPage(REPLAY_KEYS)

    def is_at_rest(self) -> bool:
        return False  # Esc and Space say that no frame listens

    def turn(self) -> None:
        now_s = time.monotonic()
        passed_s, self._turned_s = now_s - self._turned_s, now_s
        for update in self.player.advance(passed_s):
            self.take(update, now_s)
        self.scene.wants_look = False
        at_end = self.player.at_s >= self.player.recording.end_s
        if at_end and not self._at_end:
            self._at_end = True
            self.scene.sitting = self.player.look()["sitting"]
        self.orders.turn(now_s)
        self.show_now(now_s)

    def go(self, look: Mapping[str, Any]) -> None:
        """Show another moment."""
        self.scene.run_id = ""
        self.take_look(look)
        self._at_end = False
        self.inset.hide()
        self._inset_run = ""
        if self.player.at_s >= self.player.recording.end_s:
            self.scene.ending.take_result(self.player.sealed())
            said = self.player.recording.said
            if said is not None and said.notes:
                self.orders.notebook.stands(self.scene.ending.specimen, said)
        self._numbers_s = self._posed_s = float("-inf")

    def to_break(self) -> None:
        """To where the tail is in and the result stands."""
        self.go(self.player.seek(self.player.recording.end_s))
        self.player.playing = False

    def toggle_play(self) -> None:
        if self.player.at_s >= self.player.recording.end_s:
            self.go(self.player.seek(self.player.recording.begin_s))
            self.player.playing = True
        else:
            self.player.playing = not self.player.playing

    def show_now(self, now_s: float) -> None:
        super().show_now(now_s)
        recording = self.player.recording
        at_s, end_s = self.player.at_s - recording.begin_s, recording.end_s - recording.begin_s
        doing = f"x{self.player.speed:g}" if self.player.playing else "paused"
        mark = REPLAY_MARK + (" - SIMULATED DATA" if recording.cards["frame"]["simulated"] else "")
        words = (
            Line("frame", str(recording.cards["frame"]["name"])),
            Line("at", f"{at_s:.2f} of {end_s:.2f} s, {doing}"),
            Line("keys", "? keys"),
            Line("created", str(recording.meta.get("created_utc", ""))[:19] + " UTC"),
        )
        self.foot.say(mark, words)

    def still(self) -> None:
        """Everything of this moment on the glass, for a picture."""
        now_s = time.monotonic()
        self.scene.presenter.lost_updates = 0
        self.pose()
        self.trace.redraw()
        self.show_numbers(board_of(self.scene.presenter, now_s))
        self.show_now(now_s)
