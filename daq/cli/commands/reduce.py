"""midspan reduce: every number of sealed records once more, from the raw bytes."""

from __future__ import annotations

import os
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING

import click

from daq.cli.output import demand_free, write_text
from daq.errors import MidspanError

if TYPE_CHECKING:
    from daq.recompute.one import Recomputed

DIFFERENCES_SHOWN = 10
NOT_THE_RECORD = "a result file may not have the name of a record"
FILE = click.Path(dir_okay=False, path_type=Path)


@click.command()
@click.argument("paths", type=click.Path(path_type=Path), nargs=-1, required=True, metavar="FILE|DIR...")
@click.option("--json", "json_path", type=FILE, help="Write all results, differences and notes as JSON.")
@click.option("--csv", "csv_path", type=FILE, help="Write all results as CSV, units in the column names.")
@click.option("--force", is_flag=True, help="Write over result files of before. Records are never written.")
@click.option(
    "--jobs",
    type=click.IntRange(1, 256),
    default=lambda: os.cpu_count() or 1,
    show_default="all processors",
    help="Processes.",
)
@click.option("--cluster", metavar="ADDRESS", help="Let a Dask cluster do it, e.g. tcp://10.0.0.5:8786.")
@click.option(
    "--relative",
    type=click.FloatRange(0.0, 1e-6),
    default=0.0,
    show_default="0: the same bits",
    help="Allowed relative difference of a result's numbers, for records of another platform (1e-12).",
)
@click.option("--numbers-only", is_flag=True, help="Leave the watch's decisions as recorded: twice as fast.")
def command(
    paths: tuple[Path, ...],
    json_path: Path | None,
    csv_path: Path | None,
    force: bool,
    jobs: int,
    cluster: str | None,
    relative: float,
    numbers_only: bool,
) -> None:
    """Recompute sealed records from their raw bytes - same decoders, same watch, same reduction - and compare with what
    they hold. Of a folder every record in it and below.

    Each difference is one line: what, stored, recomputed. Exit code 0 when every stored number came out again; 1 when
    one did not or a record is damaged; the others are still done. Nothing is ever written into a record.

    Example: midspan reduce records/demo-series --csv results.csv
    """
    from daq.recompute.many import recompute_all, recompute_on_cluster, records_in

    if any(target is not None and target.suffix == ".h5" for target in (json_path, csv_path)):
        raise MidspanError(NOT_THE_RECORD)
    demand_free(json_path, csv_path, force=force)
    records = records_in(paths)
    if not records:
        raise MidspanError(f"no sealed record (.h5) in {', '.join(map(str, paths))}")
    if cluster is not None:
        done = recompute_on_cluster(records, cluster, relative=relative, watch=not numbers_only)
    else:
        done = recompute_all(records, jobs=jobs, relative=relative, watch=not numbers_only)
    bad = show(done, len(records), csv_path, json_path)
    raise SystemExit(1 if bad else 0)


def show(done: Iterator[Recomputed], count: int, csv_path: Path | None, json_path: Path | None) -> int:
    """Say each as it comes, write what was asked for; how many are not the same."""
    from daq.recompute.tables import csv_text, json_text, row_of, whole_of

    rows, wholes = [], []
    bad = rows_seen = 0
    for found in watched(done, count):
        say(found)
        bad += not found.ok
        rows_seen += found.rows
        if csv_path is not None:
            rows.append(row_of(found))
        if json_path is not None:
            wholes.append(whole_of(found))
    if csv_path is not None:
        write_text(csv_path, csv_text(rows))
    if json_path is not None:
        write_text(json_path, json_text(wholes))
    click.echo(f"{count} records, {rows_seen} rows: {count - bad} the same, {bad} not")
    return bad


def watched(done: Iterator[Recomputed], count: int) -> Iterator[Recomputed]:
    """With a bar where a person looks on and there is something to wait for."""
    if count < 2 or not sys.stderr.isatty():
        yield from done
        return
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TimeRemainingColumn

    columns = (BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    with Progress(*columns, console=Console(stderr=True), transient=True) as progress:
        task = progress.add_task("", total=count)
        for found in done:
            progress.advance(task)
            yield found


def say(found: Recomputed) -> None:
    """One record: one line of good news on standard output, one line a fault on standard error."""
    if found.damage:
        click.echo(f"midspan reduce: {found.damage}", err=True)
        return
    for note in found.notes:
        click.echo(f"{found.path}: {note}", err=True)
    if found.ok:
        click.echo(f"{found.path}: the same: {found.rows} rows, {found.decisions} decisions{strength(found)}")
        return
    for difference in found.differences[:DIFFERENCES_SHOWN]:
        click.echo(f"midspan reduce: {found.path}: {difference}", err=True)
    more = len(found.differences) - DIFFERENCES_SHOWN
    if more > 0:
        click.echo(f"midspan reduce: {found.path}: and {more} differences more (--json has all)", err=True)


def strength(found: Recomputed) -> str:
    value = found.result.get("strength_mpa")
    return f"; strength {value:.2f} MPa" if isinstance(value, float) else ""
