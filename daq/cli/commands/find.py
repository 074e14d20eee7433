"""midspan find: which sealed records fit a question."""

from __future__ import annotations

import hashlib
import re
import sys
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click
import platformdirs

from daq.cli.options import DATA
from daq.cli.output import demand_free, write_text
from daq.errors import MidspanError

if TYPE_CHECKING:
    from daq.recompute.catalogue import Updated

SHOWN = (
    "series",
    "specimen",
    "loading",
    "created_utc",
    "material",
    "method",
    "strength_mpa",
    "modulus_gpa",
    "break_class",
)
WIDTH = 132  # of the table where no terminal says how wide it is
_WHEN = re.compile(r"\d{4}(-(0[1-9]|1[0-2])(-(0[1-9]|[12]\d|3[01]))?)?")


def as_range(
    ctx: click.Context, param: click.Parameter, value: str | None
) -> tuple[float | None, float | None] | None:
    """LOW..HIGH, each end may be left out."""
    if value is None:
        return None
    low, dots, high = value.partition("..")
    try:
        least, most = (float(end) if end.strip() else None for end in (low, high))
    except ValueError:
        least = most = None
    if not dots or (least is None and most is None):
        raise click.BadParameter(f"{value!r}: write LOW..HIGH, LOW.. or ..HIGH, for example ..370")
    if least is not None and most is not None and not least <= most:
        raise click.BadParameter(f"{value!r}: {least:g} is above {most:g}")
    return least, most


def as_date(ctx: click.Context, param: click.Parameter, value: str | None) -> str:
    """A year, a month or a day."""
    if value is not None and not _WHEN.fullmatch(value):
        raise click.BadParameter(f"{value!r}: write a year, month or day: 2026, 2026-03 or 2026-03-31")
    return value or ""


RANGES = {
    "strength": ("strength_mpa", "Strength, MPa."),
    "modulus": ("modulus_gpa", "Modulus, GPa."),
    "peak": ("peak_n", "Load at the break, N."),
    "rate": ("stress_rate_mean_mpa_s", "Mean stress rate, MPa/s."),
    "time-to-break": ("time_to_break_s", "Time to the break, s."),
}
TEXTS = {
    "material": "Part of the material.",
    "method": "Part of the method's name.",
    "standard": "Part of the standard's designation.",
    "series": "Part of the series' name.",
    "specimen": "Part of the specimen's number.",
    "batch": "Part of the batch.",
    "frame": "Part of the frame's name.",
    "operator": "Part of the operator's name.",
    "verdict": "Part of the verdict: provisional, interrupted, ...",
    "break-class": "Part of the kind of break: sudden break, gradual failure, ...",
}


def asked(command: Callable[..., None]) -> Callable[..., None]:
    """The options that narrow the question."""
    for name, words in reversed(RANGES.items()):
        command = click.option(f"--{name}", metavar="LOW..HIGH", callback=as_range, help=words[1])(command)
    for name, text in reversed(TEXTS.items()):
        command = click.option(f"--{name}", metavar="TEXT", help=text)(command)
    return command


@click.command()
@DATA
@asked
@click.option("--since", metavar="DATE", callback=as_date, help="From this day, month or year on (UTC).")
@click.option(
    "--until", metavar="DATE", callback=as_date, help="To the end of this day, month or year (UTC)."
)
@click.option("--simulated/--real", default=None, help="Only of virtual frames, only of real ones.")
@click.option(
    "--as",
    "form",
    type=click.Choice(["table", "paths", "csv", "json"]),
    default="table",
    show_default=True,
    help="Form of the answer.",
)
@click.option(
    "--out", type=click.Path(dir_okay=False, path_type=Path), help="Write the CSV or JSON into this file."
)
@click.option("--force", is_flag=True, help="Write over a result file of before.")
@click.option(
    "--catalogue",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Where the catalogue stands; left out: in the user's cache, one for each data folder.",
)
def command(
    data: Path,
    since: str,
    until: str,
    simulated: bool | None,
    form: str,
    out: Path | None,
    force: bool,
    catalogue: Path | None,
    **options: Any,
) -> None:
    """Find sealed records below the data folder by what they say of themselves.

    The answer comes from a catalogue that is brought in line with the records first, by path and digest; it may be
    deleted at any time. Numbers are those sealed in the records; `midspan reduce` recomputes them.

    Example: midspan find --data records --material alumina --method B --since 2026 --modulus ..370
    """
    from daq.recompute.catalogue import Question, ask, update

    if out is not None and (form in ("table", "paths") or out.suffix == ".h5"):
        raise MidspanError("--out needs --as csv or --as json, and a name that is no record's")
    demand_free(out, force=force)
    if not data.is_dir():
        raise MidspanError(f"there is no data folder {data}; name one with --data")
    file = catalogue or default_catalogue(data)
    warn(update(file, data, counted()))
    texts = {name.replace("-", "_"): options[name.replace("-", "_")] for name in TEXTS}
    ranges = {column: options[name.replace("-", "_")] for name, (column, _) in RANGES.items()}
    question = Question(
        texts={name: part for name, part in texts.items() if part},
        ranges={column: ends for column, ends in ranges.items() if ends is not None},
        since=since,
        until=until,
        simulated=simulated,
    )
    answer(ask(file, question), form, out)


def default_catalogue(data: Path) -> Path:
    key = hashlib.sha256(str(data.resolve()).encode()).hexdigest()[:16]
    return Path(platformdirs.user_cache_dir("midspan")) / f"catalogue-{key}.sqlite"


def counted() -> Callable[[int, int], object]:
    """A line of progress where a person looks on."""
    if not sys.stderr.isatty():
        return lambda done, count: None

    def show(done: int, count: int) -> None:
        if done % 100 == 0 or done == count:
            click.echo(f"\rlooking at records: {done} of {count}", nl=done == count, err=True)

    return show


def warn(updated: Updated) -> None:
    for line in updated.damaged:
        click.echo(f"midspan find: left out: {line}", err=True)


def answer(rows: Sequence[Mapping[str, Any]], form: str, out: Path | None) -> None:
    from daq.recompute.tables import csv_text, json_text

    if form == "table":
        as_table(rows)
        return
    if form == "paths":
        click.echo("".join(f"{row['path']}\n" for row in rows), nl=False)
        return
    text = csv_text(rows) if form == "csv" else json_text(rows)
    if out is None:
        click.echo(text, nl=False)
    else:
        write_text(out, text)
        click.echo(f"{out}: {len(rows)} records")


def as_table(rows: Sequence[Mapping[str, Any]]) -> None:
    from rich.console import Console
    from rich.table import Table

    table = Table(box=None, pad_edge=False)
    for name in SHOWN:
        table.add_column(
            name, justify="right" if name.endswith(("_mpa", "_gpa")) else "left", overflow="fold"
        )
    for row in rows:
        table.add_row(*(shown(row[name]) for name in SHOWN))
    console = Console() if sys.stdout.isatty() else Console(width=WIDTH)
    if rows:
        console.print(table)
    console.print(f"{len(rows)} records", highlight=False)


def shown(value: object) -> str:
    if value is None or value == "":
        return "-"
    return f"{value:.5g}" if isinstance(value, float) else str(value)
