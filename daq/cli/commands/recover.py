"""midspan recover: rebuild records from journals."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import click

from daq.cli.options import DATA


@click.command()
@click.argument(
    "journals", type=click.Path(exists=True, file_okay=False, path_type=Path), nargs=-1, required=True
)
@DATA
def command(journals: tuple[Path, ...], data: Path) -> None:
    """Rebuild every record of the named journal folders. May be called again and again, and be killed at any time.

    `midspan serve` does this by itself at its start. Never overwrites a record.

    Example: midspan recover records/.spool/kiln-lane-a/journal-* --data records
    """
    from daq.record.recover import recover
    from daq.results.reduce import result_mapping

    for journal in journals:
        records = recover(journal, data, reduce=result_mapping, report=say)
        click.echo(f"{journal}: {len(records)} records")


def say(report: Mapping[str, Any]) -> None:
    """What recovery reports, as lines."""
    if report["report"] == "sealed":
        click.echo(str(report["path"]))
    elif report.get("why"):
        click.echo(f"{report['report'].replace('_', ' ')}: {report['why']}", err=True)
