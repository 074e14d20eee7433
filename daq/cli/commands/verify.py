"""midspan verify: does a record or journal still say what was written?"""

from __future__ import annotations

from pathlib import Path

import click

from daq.errors import MidspanError


@click.command()
@click.argument("paths", type=click.Path(path_type=Path), nargs=-1, required=True, metavar="PATH...")
def command(paths: tuple[Path, ...]) -> None:
    """Check sealed records (every digest, every entry's CRC and number, the account), their notes and journal
    folders (the chains).

    Exit code 0 when all are whole; 1 when one is not, with the first damaged block named. Changes nothing.

    Example: midspan verify records/demo-series/*.h5
    """
    bad = 0
    for path in paths:
        problems = journal_problems(path) if path.is_dir() else record_problems(path)
        for problem in problems:
            where = "" if str(path) in problem else f"{path}: "
            click.echo(f"midspan verify: {where}{problem}", err=True)
        bad += bool(problems)
    raise SystemExit(1 if bad else 0)


def record_problems(path: Path) -> tuple[str, ...]:
    """What is wrong with a record; says on standard output that it is whole."""
    from daq.record.verify import verify

    report = verify(path)
    if report.ok:
        account = (
            "received = recorded + rejected"
            if report.accounted
            else "no account in it: the bench did not live to write one"
        )
        click.echo(
            f"{path}: whole: {report.entries} entries, {report.rows} rows, {report.gaps} gaps; {account}"
        )
    return (*report.problems, *notes_problems(path))


def notes_problems(path: Path) -> tuple[str, ...]:
    """The notes beside it, where there are any or were."""
    from daq.record.notes import notes_path, read_notes

    kept = read_notes(path)
    if kept.notes and not kept.problems:
        click.echo(f"{notes_path(path)}: whole: {len(kept.notes)} notes, chain head {kept.head}")
    return kept.problems


def journal_problems(path: Path) -> tuple[str, ...]:
    """The same for a journal's folder."""
    from daq.record.recover import check_is_journal
    from daq.stream.journal_reader import JournalReader

    try:
        check_is_journal(path)
        found = JournalReader(path).verify()
    except MidspanError as error:
        return (str(error),)
    ending = "closed" if found.closed else "not closed: its daemon runs, or died"
    click.echo(
        f"{path}: whole: {found.entries} entries in {found.segments} segments, {found.undeclared_holes} holes; {ending}"
    )
    return ()
