"""midspan methods: the library of method cards, and what each value rests on."""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path

import click

from daq.cards.describe import about_at, unit_at
from daq.cards.library import Found, Library, clauses_by_key, find_method, read_library
from daq.cards.method import Clause, MethodCard
from daq.cli.options import METHOD_FOLDERS, method_folders
from daq.errors import CardError

GROUPS = (
    (
        "bar",
        "geometry section support_span_mm load_span_mm width_mm thickness_mm diameter_mm inner_diameter_mm "
        "chamfer_mm dimension_tolerance_percent readings dimension_u_mm measuring",
    ),
    ("fixture", "needs"),
    ("loading", "rate preload time_to_break_s limits fracture modulus peak"),
    ("verdict", "validity"),
    ("report", "strength rounding report_fields"),
    ("example material, not of the standard", "expected"),
)
VALUE_WIDTH_MAX = 40
MARKS = ("checked", "confirmed", "from memory", "unchecked")


@click.group(invoke_without_command=True)
@METHOD_FOLDERS
@click.option("--json", "as_json", is_flag=True, help="As JSON instead of a table.")
@click.pass_context
def command(ctx: click.Context, methods: tuple[Path, ...], as_json: bool) -> None:
    """List the method cards: the shipped ones and your own, which come first.

    Shipped cards hold facts and figures only, each marked confirmed, from memory or own choice. Sign a copy with your
    licensed text before it counts as checked.

    \b
    Example: midspan methods
    Example: midspan methods show C1161-B
    Example: midspan methods show C1161-B --toml > my-alumina.toml
    """
    if ctx.invoked_subcommand is not None:
        return
    library = read_library(method_folders(methods))
    if as_json:
        click.echo(json.dumps([summary(found) for found in library.methods], indent=1))
    else:
        list_methods(library)
    if library.problems:
        raise CardError(library.problems)


@command.command("show")
@click.argument("name")
@METHOD_FOLDERS
@click.option("--json", "as_json", is_flag=True, help="The whole card as JSON.")
@click.option("--toml", is_flag=True, help="The card's own file, to copy and to sign.")
def show_command(name: str, methods: tuple[Path, ...], as_json: bool, toml: bool) -> None:
    """Show one method card, each value with its mark. NAME is a name of the list, or a file.

    Example: midspan methods show C78
    """
    found = find_method(name, method_folders(methods))
    if toml:
        click.echo(found.path.read_text(encoding="utf-8"), nl=False)
    elif as_json:
        click.echo(json.dumps(found.card.model_dump(mode="json"), indent=1))
    else:
        click.echo("\n".join(card_lines(found)))


def list_methods(library: Library) -> None:
    """One line a method: name, standard and edition, title, marks."""
    rows = [
        (row["name"], row["standard"], row["title"], row["marks"]) for row in map(summary, library.methods)
    ]
    widths = [max(len(str(row[place])) for row in rows) for place in range(2)]
    for name, standard, title, marks in rows:
        click.echo(f"{name!s:<{widths[0]}}  {standard!s:<{widths[1]}}  {title}  [{marks}]")
    click.echo(f"{len(rows)} methods; `midspan methods show NAME` says what each value rests on")


def summary(found: Found) -> dict[str, object]:
    """What the list shows of a method."""
    card = found.card
    edition = f" ({card.edition})" if card.edition else ""
    return {
        "name": card.name,
        "standard": f"{card.standard}{edition}" if card.standard else "own method",
        "title": card.title,
        "marks": marks_line(card)
        + (", own card" if found.own else "")
        + (" instead of the shipped" if found.hides else ""),
        "own": found.own,
        "file": found.path.name,
    }


def marks_line(card: MethodCard) -> str:
    """How many values bear which mark; own choices are not values of the standard."""
    counts = {
        mark: sum(clause.mark == mark for clause in card.clauses)
        for mark in ("checked", "confirmed", "from memory", "unchecked")
    }
    told = [f"{count} {mark}" for mark, count in counts.items() if count]
    return ", ".join(told) or "no marks"


def card_lines(found: Found) -> Iterator[str]:
    """The readable card."""
    card, clauses = found.card, clauses_by_key(found.card)
    yield f"{card.name}: {card.title}"
    edition = clauses.get("edition")
    mark = f", edition {edition.mark}" if edition is not None else ""
    yield f"  {card.standard or 'no standard'} {card.edition}{mark}".rstrip()
    if card.scope:
        yield f"  for: {card.scope}"
    yield f"  values: {marks_line(card)}; clause numbers where they are recorded"
    for title, keys in GROUPS:
        rows = [row for key in keys.split() for row in value_rows(card, clauses, key)]
        if rows:
            yield f"{title}"
            yield from aligned(rows)
    yield from (f"note: {note}" for note in card.notes)
    signed = all(clause.mark in ("checked", "own choice") for clause in card.clauses) and card.clauses
    if not signed:
        yield "Not checked against the standard as a whole: compare with your licensed copy, then sign each clause."


def value_rows(card: MethodCard, clauses: dict[str, Clause], top: str) -> Iterator[tuple[str, str, str, str]]:
    """(value with unit, mark, meaning, where from) of every value below a key that the card sets."""
    tree = card.model_dump(mode="python", exclude_unset=True)
    for path, value in leaves(tree.get(top), (top,)):
        clause = clauses.get(".".join(path))
        mark = "not marked" if clause is None else clause.mark
        meaning = about_at(MethodCard, path).split(";")[0]
        yield value_text(value, unit_at(MethodCard, path)), mark, meaning, origin_text(clause)


def leaves(value: object, path: tuple[str, ...]) -> Iterator[tuple[tuple[str, ...], object]]:
    """Every value of a tree with its path; what is empty is left out."""
    if isinstance(value, dict):
        for key, below in value.items():
            yield from leaves(below, (*path, key))
    elif value is not None and value != ():
        yield path, value


def value_text(value: object, unit: str) -> str:
    unit = "" if unit == "1" else unit
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, tuple | list):
        if len(value) != 2 or not all(isinstance(item, float) for item in value):
            return ", ".join(str(item) for item in value)
        low, high = value
        return f"{low:g} {unit}".rstrip() if low == high else f"{low:g} to {high:g} {unit}".rstrip()
    return f"{value:g} {unit}".rstrip() if isinstance(value, float) else f"{value} {unit}".rstrip()


def origin_text(clause: Clause | None) -> str:
    """Who signed, which clause of which text, and where it was seen, as far as they are recorded."""
    if clause is None:
        return ""
    signed = f"by {clause.checked_by} on {clause.checked_on}" if clause.mark == "checked" else ""
    place = f"clause {clause.clause}" if clause.clause else ""
    return ", ".join(part for part in (signed, clause.standard, clause.edition, place, clause.source) if part)


def aligned(rows: list[tuple[str, str, str, str]]) -> Iterator[str]:
    """Value, mark and meaning in columns; a long value has a line of its own, and so has where it comes from."""
    width = max((len(value) for value, *_ in rows if len(value) <= VALUE_WIDTH_MAX), default=VALUE_WIDTH_MAX)
    for value, mark, meaning, origin in rows:
        if len(value) > width:
            yield f"  {value}"
        yield f"  {value if len(value) <= width else '':<{width}}  {mark:<11}  {meaning}"
        if origin:
            yield f"  {'':<{width}}  {'':<11}    {origin}"
