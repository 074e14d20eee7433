"""The plain terminal view: the presenter's lines, redrawn in place on a terminal, or one line now and then in a pipe."""

from __future__ import annotations

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
PIPE_EVERY_S = 0.5


class TerminalView:
    """Use as a context manager; call show() as often as you like."""

    def __init__(self, console: Console) -> None:
        self._console = console
        self._live = Live(console=console, auto_refresh=False) if console.is_terminal else None
        self._said_s = float("-inf")
        self._said = ""

    def __enter__(self) -> TerminalView:
        if self._live is not None:
            self._live.start()
        return self

    def __exit__(self, *_: object) -> None:
        if self._live is not None:
            self._live.stop()

    def show(self, lines: Sequence[Line], now_s: float) -> None:
        """Redraw, or in a pipe say the chief numbers twice a second and every change of state."""
        if self._live is not None:
            self._live.update(drawn(lines), refresh=True)
            return
        state = next((line.text for line in lines if line.label == "state"), "")
        if state == self._said and now_s - self._said_s < PIPE_EVERY_S:
            return
        self._said, self._said_s = state, now_s
        chosen = [
            line.text for line in lines if line.label in ("state", "load", "stress", "expected", "fault")
        ]
        self._console.print("   ".join(chosen), markup=False, highlight=False, soft_wrap=True)

    def say(self, text: str) -> None:
        """A line that stays."""
        self._console.print(text, markup=False, highlight=False, soft_wrap=True)


def drawn(lines: Sequence[Line]) -> Group:
    """A table of marks, labels and texts: word and mark stand beside the colour."""
    table = Table.grid(padding=(0, 2))
    for line in lines:
        style = STYLES[line.tone]
        table.add_row(
            Text(MARKS[line.tone], style=style), Text(line.label, style="dim"), Text(line.text, style=style)
        )
    return Group(table)
