"""midspan check: cards, the live bench, and the two guided proofs of a real frame."""

from __future__ import annotations

import datetime as dt
import json
import shutil
import time
from collections.abc import Sequence
from pathlib import Path

import click

from daq.cards.cautions import cautions
from daq.cards.frame import FrameCard
from daq.cards.load import check_fit, load_frame, load_method, load_series
from daq.cards.questions import questions
from daq.cli import drills
from daq.cli.options import DATA
from daq.errors import CardError, MidspanError

DISK_FREE_GIB_MIN = 10.0


@click.command()
@click.argument("cards", nargs=-1, type=click.Path(dir_okay=False, path_type=Path), metavar="CARD...")
@DATA
@click.option("--live", is_flag=True, help="Open the port and look at the signal. Never moves the frame.")
@click.option(
    "--seconds", type=click.FloatRange(1, 600), default=5.0, show_default=True, help="How long to look, s."
)
@click.option(
    "--polarity", is_flag=True, help="Guided: push by hand, then a jog of 0.5 mm; recorded for this card."
)
@click.option(
    "--stop-drill", is_flag=True, help="Guided: move without a bar, stop, measure the run-on; recorded."
)
@click.option(
    "--cell-weight",
    type=click.FloatRange(min=0, min_open=True),
    help="Guided, after an overload: zero of the cell, then this known weight, N.",
)
@click.option(
    "--schema", type=click.Choice(["frame", "method", "series"]), help="Print the card's JSON Schema."
)
def command(
    cards: tuple[Path, ...],
    data: Path,
    live: bool,
    seconds: float,
    polarity: bool,
    stop_drill: bool,
    cell_weight: float | None,
    schema: str | None,
) -> None:
    """Check frame, method and series cards (told apart by their `card` key), and on request the live bench.

    --polarity and --stop-drill move the frame; they need `midspan serve` running and ask before each movement.

    Example: midspan check frame.toml series.toml --live
    """
    if schema is not None:
        from daq.cards.schema import card_schema

        click.echo(json.dumps(card_schema(schema), indent=1))
        return
    if not cards:
        raise click.UsageError("name at least one card, or --schema frame|method|series")
    frame, must_correct = check_cards(cards)
    if frame is not None:
        if live:
            check_live(frame, data, seconds)
        if polarity:
            drills.polarity(frame)
        if stop_drill:
            drills.stop_drill(frame)
        if cell_weight is not None:
            drills.cell_weight(frame, cell_weight)
    elif live or polarity or stop_drill or cell_weight is not None:
        raise click.UsageError("--live, --polarity, --stop-drill and --cell-weight need a frame card")
    if must_correct:
        raise MidspanError(f"{must_correct} of the questions must be corrected before a run: see above")


def check_cards(cards: Sequence[Path]) -> tuple[FrameCard | None, int]:
    """Load cards of any kind, frames first; every fault is a line of the error. The last frame, and grave questions."""
    frame, must_correct = None, 0
    problems: list[str] = []
    for path in sorted(cards, key=lambda path: kind_of(path) != "frame"):
        try:
            kind = kind_of(path)
            if kind == "series":
                must_correct += check_series(path, frame)
            elif kind == "method":
                check_method(path)
            else:
                frame = check_frame(path)
        except CardError as error:
            problems += error.problems
    if problems:
        raise CardError(tuple(problems))
    return frame, must_correct


def check_series(path: Path, frame: FrameCard | None) -> int:
    """How many questions must be corrected before a run."""
    loaded = load_series(path)
    click.echo(
        f"{path}: series {loaded.card.name}, {len(loaded.specimens)} bars, method {loaded.method.name}"
    )
    if frame is None:
        return 0
    fixture = loaded.card.fixture
    check_fit(frame, loaded.method, fixture, str(path))
    tell_cautions(
        cautions(frame, loaded.method, fixture=fixture, bars=len(loaded.specimens), today=dt.date.today())[
            len(cautions(frame, today=dt.date.today())) :
        ]
    )
    asked = questions(frame, loaded.method, loaded.specimens, fixture=fixture, series=loaded.card)
    for question in asked:
        click.echo(f"  ? {question.line}")
    return sum(question.must_correct for question in asked)


def check_method(path: Path) -> None:
    method = load_method(path)
    click.echo(f"{path}: method {method.name}, {method.geometry}, support span {method.support_span_mm:g} mm")


def check_frame(path: Path) -> FrameCard:
    frame = load_frame(path)
    click.echo(f"{path}: frame {frame.name}, {'SIMULATED' if frame.simulated else 'real'}")
    tell_cautions(cautions(frame, today=dt.date.today()))
    return frame


def tell_cautions(lines: Sequence[str]) -> None:
    for line in lines:
        click.echo(f"  ! {line}")


def kind_of(path: Path) -> str:
    """The card's own word; load_frame gives the clear error for anything that does not even parse."""
    import tomllib

    try:
        return str(tomllib.loads(path.read_text(encoding="utf-8")).get("card", "frame"))
    except (OSError, ValueError):
        return "frame"


def check_live(frame: FrameCard, data: Path, seconds: float) -> None:
    """Rate, noise, hum, drift, resolution, latency timer, clock and disk. MidspanError when it could not serve."""
    from daq.cli.livelook import latency_timer_ms, look_at_links

    findings = look_at_links(frame, seconds)
    for line in findings.lines:
        click.echo(f"  {line}")
    for link in frame.links:
        timer_ms = latency_timer_ms(link)
        if timer_ms is not None:
            wish = "" if timer_ms <= 1 else "  -> set it to 1 ms, see docs/recipes/99-midspan.rules"
            click.echo(f"  link {link.name}: latency timer {timer_ms} ms{wish}")
    click.echo(f"  {disk_line(data)}")
    resolution_ns = time.get_clock_info("monotonic").resolution * 1e9
    click.echo(f"  clock: monotonic, resolution {resolution_ns:.0f} ns; wall time is a label only")
    if findings.faults:
        raise MidspanError("\n".join(findings.faults))


def disk_line(data: Path) -> str:
    """Room where the records would go; the folder need not be there yet, and is not made."""
    folder = next(place for place in (data.absolute(), *data.absolute().parents) if place.is_dir())
    free_gib = shutil.disk_usage(folder).free / 2**30
    wish = "" if free_gib > DISK_FREE_GIB_MIN else f"  -> less than {DISK_FREE_GIB_MIN:g}: make room"
    return f"disk: {free_gib:.1f} GiB free for {data}{wish}"
