"""midspan simulate: a virtual frame on a pty or TCP port."""

from __future__ import annotations

from pathlib import Path

import click

from daq.cli.options import FRAME_CARD


@click.command()
@FRAME_CARD
@click.option(
    "--bars", "bars_card", type=click.Path(dir_okay=False, path_type=Path), help="Simulator card (TOML)."
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

    Example: midspan simulate kiln-lane-a.toml --bars alumina.toml --hands hands.sock
    """
    from simulator.wire import run_wire

    raise SystemExit(run_wire(frame_card, bars_card, seed=seed, hands=hands, truth=truth))
