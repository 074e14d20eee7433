"""The plain view: fits 80 x 24, says everything without colour, draws no more than it may, says changes in a pipe."""

from __future__ import annotations

import io

from rich.console import Console

from monitor.presenter import Line, Tone
from monitor.terminal import DRAW_EVERY_S, MARKS, PIPE_EVERY_S, TerminalView, drawn

FAULT = "no contact where it was expected: no specimen or no force signal; -0.6161 mm, limit -0.6163 mm; stopped; look"
LINES = [
    Line("frame", "kiln-lane-a   PRACTICE - SIMULATED DATA", Tone.CAUTION),
    Line("state", "stopped", Tone.STOP),
    Line("load", "1000.0 N net   1002.4 N gross", Tone.STOP),
    Line("data", "0.1 s old"),
    Line("fault", FAULT, Tone.STOP),
]


def on_paper(lines: list[Line]) -> list[str]:
    paper = io.StringIO()
    Console(file=paper, width=80, no_color=True).print(drawn(lines))
    return paper.getvalue().splitlines()


def test_a_view_of_twelve_lines_with_a_long_fault_fits_a_small_terminal() -> None:
    shown = on_paper([*LINES, *[Line("line", "x" * 60)] * 8])
    assert len(shown) <= 23 and max(len(line) for line in shown) <= 80


def test_no_word_is_lost_where_a_line_is_too_long() -> None:
    shown = " ".join(" ".join(on_paper(LINES)).split())
    assert FAULT in shown


def test_what_a_line_means_is_seen_without_colour() -> None:
    assert len(set(MARKS.values())) == len(MARKS)
    shown = on_paper([Line("state", tone.value, tone) for tone in Tone])
    assert [line[0] for line in shown] == [MARKS[tone] for tone in Tone]


def test_a_pipe_gets_changes_of_state_at_once_and_numbers_now_and_then() -> None:
    paper = io.StringIO()
    with TerminalView(Console(file=paper, width=40)) as view:
        view.show([Line("state", "loading"), Line("load", "1 N")], 0.0)
        view.show([Line("state", "loading"), Line("load", "2 N")], 0.1)
        view.show([Line("state", "broken - unloaded"), Line("load", "3 N")], 0.2)
        view.show([Line("state", "broken - unloaded"), Line("load", "4 N")], 0.3 + PIPE_EVERY_S)
        view.say("a line that stays, longer than the forty columns of this paper")
    assert paper.getvalue().splitlines() == [
        "loading   1 N",
        "broken - unloaded   3 N",
        "broken - unloaded   4 N",
        "a line that stays, longer than the forty columns of this paper",
    ]


def test_a_terminal_is_not_drawn_more_often_than_it_can_be_read() -> None:
    paper = io.StringIO()
    with TerminalView(Console(file=paper, width=80, force_terminal=True)) as view:
        assert view.due(0.0)
        view.show([Line("state", "first")], 0.0)
        assert not view.due(0.5 * DRAW_EVERY_S) and view.due(100.0)
        view.show([Line("state", "second")], 0.5 * DRAW_EVERY_S)
        view.show([Line("state", "third")], 0.5 * DRAW_EVERY_S, last=True)
    said = paper.getvalue()
    assert "first" in said and "second" not in said and "third" in said
