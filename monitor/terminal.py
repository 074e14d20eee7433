"""The plain terminal view: the presenter's lines, redrawn in place, or a line now and then in a pipe.

It draws at most five times a second and never more than a fifth of the time, so that who calls it can keep up
with the feed on a busy computer.
"""

from __future__ import annotations

import time
from collections.abc import Sequence

from rich.console import Console, Group
from rich.live import Live
from rich.table import Table
from rich.text import Text

from monitor.presenter import Line, Tone

MARKS = {Tone.PLAIN: " ", Tone.GOOD: "+", Tone.CAUTION: "!", Tone.STOP: "X", Tone.OLD: "?"}
STYLES = {
    Tone.PLAIN: "",
    Tone.GOOD: "bold",
    Tone.CAUTION: "bold yellow",
    Tone.STOP: "bold white on red",
    Tone.OLD: "dim",
}
DRAW_EVERY_S = 0.2  # numbers change 4 to 5 times a second: readable (trade judgement, no source)
DRAW_SHARE = 0.2  # of the time
PIPE_EVERY_S = 0.5
PIPE_LABELS = ("state", "load", "stress", "expected", "fault", "caution", "recording")


class TerminalView:
    """Use as a context manager; call show() as often as you like."""

    def __init__(self, console: Console) -> None:
        self._console = console
        self._live = Live(console=console, auto_refresh=False) if console.is_terminal else None
        self._draw_s = float("-inf")
        self._said = ""

    def __enter__(self) -> TerminalView:
        if self._live is not None:
            self._live.start()
        return self

    def __exit__(self, *_: object) -> None:
        if self._live is not None:
            self._live.stop()

    def show(self, lines: Sequence[Line], now_s: float, *, last: bool = False) -> None:
        """Redraw where it is due; in a pipe say the chief numbers twice a second and every change of state.

        last: what stays on the screen when the view is left.
        """
        if self._live is None:
            self._print(lines, now_s)
        elif last or now_s >= self._draw_s:
            begun_s = time.monotonic()
            self._live.update(drawn(lines), refresh=True)
            took_s = time.monotonic() - begun_s
            self._draw_s = now_s + max(DRAW_EVERY_S, took_s / DRAW_SHARE)

    def due(self, now_s: float) -> bool:
        """Whether show() would do anything but wait; a pipe decides by what it is given."""
        return self._live is None or now_s >= self._draw_s

    def _print(self, lines: Sequence[Line], now_s: float) -> None:
        state = next((line.text for line in lines if line.label == "state"), "")
        if state == self._said and now_s < self._draw_s:
            return
        self._said, self._draw_s = state, now_s + PIPE_EVERY_S
        chosen = [line.text for line in lines if line.label in PIPE_LABELS]
        self.say("   ".join(chosen))

    def say(self, text: str) -> None:
        """Lines that stay."""
        self._console.print(text, markup=False, highlight=False, soft_wrap=self._live is None)


def drawn(lines: Sequence[Line]) -> Group:
    """A table of marks, labels and texts: word and mark stand beside the colour."""
    table = Table.grid(padding=(0, 2))
    for line in lines:
        style = STYLES[line.tone]
        table.add_row(
            Text(MARKS[line.tone], style=style), Text(line.label, style="dim"), Text(line.text, style=style)
        )
    return Group(table)
