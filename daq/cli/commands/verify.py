"""midspan verify: does a record or journal still say what was written?"""

from __future__ import annotations

from pathlib import Path

import click


@click.command()
@click.argument("paths", type=click.Path(path_type=Path), nargs=-1, required=True, metavar="FILE...")
def command(paths: tuple[Path, ...]) -> None:
    """Check sealed records : every digest, every entry's CRC and number, the accounting.

    Exit code 0 when all are whole; 1 when one is not, with the first damaged block named.

    Example: midspan verify records/demo-series/*.h5
    """
    from daq.record.verify import verify

    bad = 0
    for path in paths:
        report = verify(path)
        for problem in report.problems:
            click.echo(problem)
        if report.ok:
            account = (
                "received = recorded + rejected" if report.accounted else "no account of the bench in it"
            )
            click.echo(
                f"{path}: whole: {report.entries} entries, {report.rows} rows, {report.gaps} gaps; {account}"
            )
        bad += not report.ok
    raise SystemExit(1 if bad else 0)
