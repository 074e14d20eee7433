"""midspan check: cards, the live bench, and the two guided proofs of a real frame."""

from __future__ import annotations

import json
import shutil
import time
from pathlib import Path

import click

from daq.cards.frame import FrameCard
from daq.cards.load import check_fit, load_frame, load_method, load_series
from daq.cards.questions import questions
from daq.cli import drills
from daq.cli.options import DATA
from daq.errors import MidspanError

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
    "--schema", type=click.Choice(["frame", "method", "series"]), help="Print the card's JSON Schema."
)
def command(
    cards: tuple[Path, ...],
    data: Path,
    live: bool,
    seconds: float,
    polarity: bool,
    stop_drill: bool,
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
        raise MidspanError("midspan check: name at least one card, or --schema frame|method|series")
    frame = None
    for path in cards:
        frame = check_card(path, frame) or frame
    if (live or polarity or stop_drill) and frame is None:
        raise MidspanError("midspan check: --live, --polarity and --stop-drill need a frame card")
    if live:
        check_live(frame, data, seconds)  # type: ignore[arg-type]
    if polarity:
        drills.polarity(frame)  # type: ignore[arg-type]
    if stop_drill:
        drills.stop_drill(frame)  # type: ignore[arg-type]


def check_card(path: Path, frame: FrameCard | None) -> FrameCard | None:
    """Load one card of any kind; every fault is a line of the error."""
    kind = kind_of(path)
    if kind == "series":
        loaded = load_series(path)
        click.echo(
            f"{path}: series {loaded.card.name}, {len(loaded.specimens)} bars, method {loaded.method.name}"
        )
        if frame is not None:
            check_fit(frame, loaded.method, loaded.card.fixture, str(path))
            asked = questions(
                frame, loaded.method, loaded.specimens, fixture=loaded.card.fixture, series=loaded.card
            )
            for question in asked:
                click.echo(f"? {question.line}")
        return None
    if kind == "method":
        method = load_method(path)
        click.echo(
            f"{path}: method {method.name}, {method.geometry}, support span {method.support_span_mm:g} mm"
        )
        return None
    loaded_frame = load_frame(path)
    click.echo(f"{path}: frame {loaded_frame.name}, {'SIMULATED' if loaded_frame.simulated else 'real'}")
    if loaded_frame.motion is None:
        click.echo("  monitor only: midspan cannot stop this frame")
    elif loaded_frame.motion.keep_alive is None:
        click.echo("  THIS FRAME DOES NOT STOP IF THE COMPUTER DIES: the card declares no keep-alive")
    return loaded_frame


def kind_of(path: Path) -> str:
    """The card's own word; load_frame gives the clear error for anything that does not even parse."""
    import tomllib

    try:
        return str(tomllib.loads(path.read_text(encoding="utf-8")).get("card", "frame"))
    except (OSError, ValueError):
        return "frame"


def check_live(frame: FrameCard, data: Path, seconds: float) -> None:
    """Rate, noise, hum, drift, resolution, latency timer, clock and disk."""
    from daq.cli.livelook import latency_timer_ms, look_at_links

    for line in look_at_links(frame, seconds):
        click.echo(f"  {line}")
    for link in frame.links:
        timer_ms = latency_timer_ms(link)
        if timer_ms is not None:
            wish = "" if timer_ms <= 1 else "  -> set it to 1 ms, see docs/recipes/99-midspan.rules"
            click.echo(f"  link {link.name}: latency timer {timer_ms} ms{wish}")
    data.mkdir(parents=True, exist_ok=True)
    free_gib = shutil.disk_usage(data).free / 2**30
    click.echo(
        f"  disk: {free_gib:.1f} GiB free at {data}"
        + ("" if free_gib > DISK_FREE_GIB_MIN else "  -> below 10")
    )
    resolution_ns = time.get_clock_info("monotonic").resolution * 1e9
    click.echo(f"  clock: monotonic, resolution {resolution_ns:.0f} ns; wall time is a label only")
