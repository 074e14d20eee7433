"""midspan recover: rebuild records from journals."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import click

from daq.cli.options import DATA
from daq.errors import MidspanError
from daq.station.stopline import runtime_root


@click.command()
@click.argument("journals", type=click.Path(path_type=Path), nargs=-1, required=True, metavar="JOURNAL...")
@DATA
@click.option(
    "--keep", is_flag=True, help="Leave the journal where it is, also when all of it is in records."
)
def command(journals: tuple[Path, ...], data: Path, keep: bool) -> None:
    """Rebuild every record of the named journal folders, and remove a journal once all of it is in records.

    `midspan serve` does this by itself at its start. May be called again and again, and be killed at any time. A record
    is never overwritten; a damaged journal is never removed. Exit code 1 when one could not be recovered whole.

    Example: midspan recover records/.spool/kiln-lane-a/journal-* --data records
    """
    bad = 0
    for journal in journals:
        try:
            bad += recover_one(journal, data, keep)
        except MidspanError as error:
            click.echo(f"midspan recover: {error}", err=True)
            bad += 1
    raise SystemExit(1 if bad else 0)


def recover_one(journal: Path, data: Path, keep: bool) -> bool:
    """Whether something of it is damaged."""
    from daq.record.recover import check_is_journal, recover
    from daq.results.reduce import result_mapping

    damaged: list[str] = []

    def say(report: Mapping[str, Any]) -> None:
        if report["report"] == "sealed":
            click.echo(str(report["path"]))
        elif report["report"] == "journal_damaged":
            damaged.append(str(report["why"]))
        elif report.get("why"):
            click.echo(f"midspan recover: {report['report'].replace('_', ' ')}: {report['why']}", err=True)

    check_is_journal(journal)
    take_ring(journal)
    records = recover(journal, data, reduce=result_mapping, report=say, keep=keep)
    click.echo(f"{journal}: {len(records)} {'record' if len(records) == 1 else 'records'}")
    for why in damaged:
        click.echo(f"midspan recover: {journal} is damaged and is kept: {why}", err=True)
    return bool(damaged)


def take_ring(journal: Path) -> None:
    """What a dead daemon left in its ring, and its recorder had not yet put into the journal."""
    from daq.record.recorder import drain_ring

    ring = runtime_root() / journal.absolute().parent.name / f"ring-{journal.name.removeprefix('journal-')}"
    count = drain_ring(ring, journal) if ring.exists() else 0
    if count:
        click.echo(f"{journal}: {count} entries taken from the ring of the dead daemon")
