"""The shell of `midspan report`: reads records and notes, writes files. What it says is made in daq.series, purely."""

from __future__ import annotations

import os
import sys
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import click
import numpy as np

from daq.errors import MidspanError, RecordDamaged
from daq.record.read import read_trace
from daq.results.reduce import trace_columns
from daq.series.compare import Ratio, compare
from daq.series.content import report_of
from daq.series.figures import figures_of
from daq.series.html import html_of
from daq.series.leaf import Leaf, Series, series_of, stiffness_ratios
from daq.series.pdf import pdf_of
from daq.series.tables import csv_of, json_of
from daq.station.notebook import Page, read_page

COMPARE_SEED = 20240611  # the same two series give the same report


def gather(folder: Path) -> Series:
    """All sealed records of a folder with their notes, in the order of loading. MidspanError where there is none."""
    paths = sorted(folder.glob("*.h5"))
    if not paths:
        raise MidspanError(f"{folder}: no sealed record (*.h5) in this folder")
    pages: list[Page] = []
    left_out: list[str] = []
    stderr = sys.stderr
    with click.progressbar(paths, label="reading", file=stderr, hidden=not stderr.isatty()) as walked:
        for path in walked:
            try:
                pages.append(read_page(path))
            except RecordDamaged as error:
                left_out.append(str(error).replace(str(path), path.name))
    pages.sort(
        key=lambda page: (
            str(page.meta["created_utc"]),
            str(page.meta["specimen"]),
            int(page.meta["loading"]),
        )
    )
    moduli = [_modulus(page) for page in pages]
    for place, ratio in enumerate(stiffness_ratios(moduli)):
        if ratio is not None:
            pages[place] = pages[place].stood_again(series_ratio=ratio)
    names = sorted({str(page.meta["series"]) for page in pages})
    title = names[0] if len(names) == 1 else folder.resolve().name
    return series_of(title, [leaf_of(page) for page in pages], left_out)


def _modulus(page: Page) -> float | None:
    value = page.standing.result.get("modulus_gpa")
    return None if isinstance(value, bool) or not isinstance(value, int | float) else float(value)


def leaf_of(page: Page) -> Leaf:
    """Drawn from the sealed trace; anew where sizes or spans were corrected."""
    mended = page.standing.cards != page.run.cards
    trace = trace_columns(replace(page.run, cards=page.standing.cards)) if mended else read_trace(page.path)
    return Leaf(
        name=page.path.name,
        meta={key: value for key, value in page.meta.items() if key not in ("result", "path")},
        standing=page.standing,
        trace=trace,
        gaps=len(page.meta["gaps"]),
        notes=len(page.kept.notes),
        head=page.kept.head,
        problems=tuple(problem.replace(str(page.path.parent) + os.sep, "") for problem in page.kept.problems),
    )


def compared(series: Series, other: Series) -> tuple[str, tuple[Ratio, ...] | str]:
    """Name of the other series, and the ratios."""

    def sides(one: Series) -> tuple[list[float], list[float]]:
        counted = [bar.strength_mpa for bar in one.analysis.counted if bar.strength_mpa is not None]
        return counted, [bar.suspended_mpa for bar in one.analysis.suspended if bar.suspended_mpa]

    (first, first_left), (second, second_left) = sides(series), sides(other)
    found = compare(
        first,
        second,
        np.random.default_rng(COMPARE_SEED),
        first_suspended_mpa=first_left,
        second_suspended_mpa=second_left,
    )
    return other.title, found


def write_report(
    series: Series,
    out: Path,
    against: tuple[str, tuple[Ratio, ...] | str] | None = None,
    *,
    force: bool = False,
) -> Iterator[Path]:
    """Four files; each path once it is written. Refuses to overwrite one that differs, unless forced."""
    report = report_of(series, against)
    figures = figures_of(series)
    made = {
        "html": html_of(report, figures),
        "pdf": pdf_of(report, figures),
        "csv": csv_of(series),
        "json": json_of(series, report),
    }
    out.mkdir(parents=True, exist_ok=True)
    paths = {out / f"{series.title}-report.{ending}": data for ending, data in made.items()}
    taken = [path.name for path, data in paths.items() if path.exists() and path.read_bytes() != data]
    if taken and not force:
        raise MidspanError(f"{', '.join(taken)} in {out} would change; --force overwrites")
    for path, data in paths.items():
        temp = path.with_name(f".{path.name}.part")
        temp.write_bytes(data)
        os.replace(temp, path)
        yield path
