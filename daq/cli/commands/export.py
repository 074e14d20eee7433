"""midspan export: a sealed record as CSV."""

from __future__ import annotations

from pathlib import Path

import click


@click.command()
@click.argument(
    "records", type=click.Path(exists=True, dir_okay=False, path_type=Path), nargs=-1, required=True
)
@click.option(
    "--out", type=click.Path(file_okay=False, path_type=Path), default=Path("."), help="Target folder."
)
@click.option("--force", is_flag=True, help="Overwrite files of an earlier export.")
def command(records: tuple[Path, ...], out: Path, force: bool) -> None:
    """Write channels, events and result of sealed records as CSV and JSON; units stand in the column names.

    Example: midspan export records/demo-series/demo-series_DEMO-01_01.h5 --out csv
    """
    from daq.record.export import export_csv

    for record in records:
        for path in export_csv(record, out, force=force):
            click.echo(str(path))
