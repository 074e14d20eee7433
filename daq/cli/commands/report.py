"""midspan report: a series as HTML, PDF, CSV and JSON."""

from __future__ import annotations

from pathlib import Path

import click

from daq.cli.options import DATA
from daq.errors import MidspanError


@click.command()
@click.argument("series", type=str, metavar="FOLDER|SERIES")
@DATA
@click.option("--out", type=click.Path(file_okay=False, path_type=Path), default=Path("."), show_default="this folder",
              help="Where the four files go.")  # fmt: skip
@click.option("--beside", type=str, metavar="FOLDER|SERIES", help="Compare with this other series.")
@click.option("--force", is_flag=True, help="Overwrite the files of an earlier report that differ.")
def command(series: str, data: Path, out: Path, beside: str | None, force: bool) -> None:
    """Report a series of sealed records: strengths in MPa, loads in N, lengths in mm, everything with its method and N.

    SERIES is a folder of sealed records, or the name of a series below --data. Writes <series>-report.html, .pdf, .csv
    (units in the column names) and .json. The same records and notes give the same bytes. A damaged record is named and
    left out, notes that are not as written are named, the rest is reported; exit code 1 then.

    Example: midspan report demo-out/demo-20260101-120000 --out reports
    """
    from daq.cli.reporting import compared, gather, write_report

    found = gather(folder_of(series, data))
    against = None if beside is None else compared(found, gather(folder_of(beside, data)))
    for path in write_report(found, out, against, force=force):
        click.echo(str(path))
    bad = [*found.left_out, *(problem for leaf in found.leaves for problem in leaf.problems)]
    for line in bad:
        click.echo(f"midspan report: {line}", err=True)
    raise SystemExit(1 if bad else 0)


def folder_of(series: str, data: Path) -> Path:
    """The folder that is meant; MidspanError with what was looked for."""
    for folder in (Path(series), data / series):
        if folder.is_dir():
            return folder
    raise MidspanError(
        f"series {series!r}: no such folder, and none of that name in {data}; name a folder of records"
    )
