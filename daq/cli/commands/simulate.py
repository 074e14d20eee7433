"""midspan simulate: a virtual frame on a pty or TCP port."""

from __future__ import annotations

from importlib import resources
from pathlib import Path

import click

from daq.cli.options import FRAME_CARD


@click.command()
@FRAME_CARD
@click.option(
    "--bars",
    "bars_card",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Simulator card (TOML), or the name of a shipped one: alumina, glass, graphite, mortar, ...",
)
@click.option("--seed", type=int, help="Seed of the flaw population and noise; the card's when not given.")
@click.option("--hands", type=click.Path(path_type=Path), help="Socket that stands for the person's hands.")
@click.option(
    "--truth", type=click.Path(dir_okay=False, path_type=Path), help="File for the true values, tests only."
)
def command(
    frame_card: Path, bars_card: Path | None, seed: int | None, hands: Path | None, truth: Path | None
) -> None:
    """Play the machine of FRAME_CARD: a pty at the card's port, or a server on the card's TCP port.

    Speaks the card's own dialect and motion commands, with bars that break where a flaw is weak enough.

    Without --hands the next bar lies on the rollers a second after the last one broke and the way is clear.

    Example: midspan simulate kiln-lane-a.toml --bars alumina
    """
    from simulator.wire import run_wire

    bars = shipped_or_own(bars_card) if bars_card is not None else None
    raise SystemExit(run_wire(frame_card, bars, seed=seed, hands=hands, truth=truth))


def shipped_or_own(bars: Path) -> Path:
    """The file of that name, or the shipped card of that name."""
    if bars.exists() or bars.parent != Path("."):
        return bars
    shipped = Path(str(resources.files("simulator") / "examples"))
    names = sorted(path.stem for path in shipped.glob("*.toml"))
    if bars.stem not in names:
        raise click.BadParameter(
            f"no file {bars}, and shipped are only: {', '.join(names)}", param_hint="--bars"
        )
    return shipped / f"{bars.stem}.toml"
