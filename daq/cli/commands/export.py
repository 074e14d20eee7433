"""midspan export: sealed records as CSV."""

from __future__ import annotations

from pathlib import Path

import click

from daq.errors import MidspanError


@click.command()
@click.argument("records", type=click.Path(path_type=Path), nargs=-1, required=True, metavar="RECORD...")
@click.option(
    "--out",
    type=click.Path(file_okay=False, path_type=Path),
    default=Path("."),
    show_default="this folder",
    help="Target folder.",
)
@click.option("--force", is_flag=True, help="Overwrite files of an earlier export.")
def command(records: tuple[Path, ...], out: Path, force: bool) -> None:
    """Write channels, events and result of sealed records as CSV and JSON; units stand in the column names.

    A damaged record is refused and the others are written; exit code 1 then. The records themselves never change.

    Example: midspan export records/demo-series/demo-series_DEMO-01_01.h5 --out csv
    """
    from daq.record.export import export_csv

    bad = 0
    for record in records:
        try:
            for path in export_csv(record, out, force=force):
                click.echo(str(path))
        except MidspanError as error:
            bad += 1
            click.echo(f"midspan export: {error}", err=True)
    raise SystemExit(1 if bad else 0)
