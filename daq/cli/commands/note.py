"""midspan note: break notes, corrections, verdicts and remarks beside a sealed record."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import click

from daq.cards.notes import READINGS, Quantity
from daq.errors import MidspanError

VERDICTS = ("counted", "counted with remark", "not counted")
MM = click.FLOAT


@click.command()
@click.argument("record", type=click.Path(dir_okay=False, path_type=Path))
@click.option("--name", default="", help="Who says so; needed to write.")
@click.option("--reason", default="", help="Why; needed for a correction or a verdict.")
@click.option(
    "--at", "at_mm", type=MM, multiple=True, help="Break in mm from mid-span, right positive; primary first."
)
@click.option(
    "--from-left", "left_mm", type=MM, multiple=True, help="The same in mm from the bar's left end."
)
@click.option("--pieces", type=int, help="Number of pieces.")
@click.option("--kept", type=click.Choice(["left", "right", "both", "none"]), help="Pieces that are kept.")
@click.option("--origin", help="Fracture origin, such as Pv, MDs&Pv, A/P, P+MDs, P? or - for not examined.")
@click.option(
    "--origin-at", "origin_from_mid_mm", type=MM, help="Origin in mm from mid-span; default: the break."
)
@click.option("--origin-depth", "origin_depth_mm", type=MM, help="Origin in mm from the tension face.")
@click.option(
    "--edge-thickness", "edge_mm", type=MM, multiple=True, help="Thickness in mm along the broken edge."
)
@click.option("--picture", "pictures", type=click.Path(exists=True, dir_okay=False, path_type=Path), multiple=True,
              help="Image of the break; kept by name and digest.")  # fmt: skip
@click.option("--correct", "corrections", multiple=True, metavar="QUANTITY=MM[,MM...]",
              help="Correct " + ", ".join(q.value for q in Quantity) + ".")  # fmt: skip
@click.option("--verdict", type=click.Choice(VERDICTS), help="Overrule the method's rules.")
@click.option("--remark", default="", help="Anything else worth keeping.")
def command(record: Path, name: str, reason: str, **said: Any) -> None:
    """Show what stands for one loading, or add to it: what the pieces show, a size that was wrong, a verdict.

    Notes are appended to a file beside the record, chained by digests. The record is never touched, what was noted is
    never removed, and old and new values are both reported. Lengths are in mm.

    Example: midspan note records/kiln/kiln_A07_01.h5 --name "Q. Tester" --at 3.5 --pieces 2 --origin Pv
    """
    from daq.station.notebook import read_page, take_notes

    page = read_page(record)
    notes = list(_notes(name, reason, said, page.run.cards))
    if notes and not name.strip():
        raise click.UsageError("--name is needed: a note without a name is worth nothing")
    if not notes and (name or reason):
        raise click.UsageError("nothing to note: give --at, --origin, --correct, --verdict, --remark, ...")
    if notes:
        page = take_notes(record, notes)
    from daq.cli.standing import standing_lines

    for line in standing_lines(page):
        click.echo(line)
    if page.kept.problems:
        raise MidspanError("\n".join(page.kept.problems))


def _notes(name: str, reason: str, said: dict[str, Any], cards: Any) -> Iterator[dict[str, Any]]:
    head = {"name": name, "reason": reason}
    broken = _break_note(said, cards)
    if broken:
        yield {**head, "break_note": broken}
    for text in said["corrections"]:
        yield {**head, "correction": _correction(text)}
    if said["verdict"]:
        yield {**head, "verdict": {"new": said["verdict"]}}
    if said["remark"]:
        yield {**head, "remark": said["remark"]}


def _break_note(said: dict[str, Any], cards: Any) -> dict[str, Any]:
    from daq.mechanics.breakplace import from_mid_of_left_mm

    found = {key: said[key] for key in ("pieces", "kept", "origin", "origin_from_mid_mm", "origin_depth_mm")}
    found = {key: value for key, value in found.items() if value is not None}
    if said["at_mm"] and said["left_mm"]:
        raise click.UsageError("--at and --from-left: give one of the two")
    if said["at_mm"]:
        found |= {"from_mid_mm": said["at_mm"], "measured": "from mid-span"}
    if said["left_mm"]:
        length_mm = (cards.get("specimen") or {}).get("length_mm")
        if not length_mm:
            raise click.UsageError(
                "--from-left needs the bar's length on its bench sheet; use --at, from mid-span"
            )
        try:
            found["from_mid_mm"] = tuple(from_mid_of_left_mm(mm, length_mm) for mm in said["left_mm"])
        except ValueError as error:
            raise click.UsageError(str(error)) from error
        found["measured"] = f"from the left end of a bar of {length_mm:g} mm"
    if said["edge_mm"]:
        found["edge_thickness_mm"] = said["edge_mm"]
    if said["pictures"]:
        from daq.record.publish import sha256_of

        found["pictures"] = [{"file": path.name, "sha256": sha256_of(path)} for path in said["pictures"]]
    return found


def _correction(text: str) -> dict[str, Any]:
    word, equals, numbers = text.partition("=")
    known = {quantity.value: quantity for quantity in Quantity}
    if word not in known or not equals:
        raise click.UsageError(f"--correct {text}: one of {', '.join(known)}, then = and the value in mm")
    try:
        new = tuple(float(part) for part in numbers.split(","))
    except ValueError as error:
        what = "readings in mm, separated by commas" if known[word] in READINGS else "one number in mm"
        raise click.UsageError(f"--correct {text}: {what}, with a decimal point") from error
    return {"quantity": word, "new": new}
