"""midspan plan: what a series will do, before a bar is cut."""

from __future__ import annotations

import json
import re
import secrets
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import click

from daq.cards.change import changed_method, measured_method
from daq.cards.faults import raise_faults
from daq.cards.frame import FrameCard
from daq.cards.library import find_method
from daq.cards.load import load_frame, load_series
from daq.cards.method import MethodCard
from daq.cards.rules_fit import fit_faults, fitting_fixtures
from daq.cards.tree import read_tree
from daq.cli.options import METHOD_FOLDERS, method_folders
from daq.cli.plantext import order_csv, order_lines, plan_data, plan_lines
from daq.errors import MidspanError
from daq.mechanics.sections import Spans
from daq.series.gates import Finding, Gate, findings, refusal
from daq.series.order import Turn, firing_order
from daq.series.plan import Bench, bench_of, lag_of, make_plan
from daq.series.suggest import suggest

BARS_MAX = 2000
SEED_BITS = 32
SPAN_KEYS = ("fixture", "geometry", "support_span_mm", "load_span_mm")
ACCEPT = re.compile(r"[^\s:][^:]{0,79}:\s*\S.{2,}")
# option -> key of the method card
CHANGES = {
    "strength": "expected.strength_mpa",
    "weibull": "expected.weibull_modulus",
    "modulus": "expected.modulus_gpa",
    "poisson": "expected.poisson_ratio",
    "span": "support_span_mm",
    "load_span": "load_span_mm",
    "width": "width_mm",
    "thickness": "thickness_mm",
    "diameter": "diameter_mm",
    "speed": "rate.speed_mm_min",
    "force_rate": "rate.rate_n_s",
    "stress_rate": "rate.rate_mpa_s",
}


@dataclass(frozen=True, slots=True)
class Subject:
    """What is planned: a method, and the bars and the fixture where a series card names them."""

    method: MethodCard
    fixture: str | None
    bars: tuple[tuple[str, str], ...]


@click.command()
@click.argument("method", metavar="METHOD|SERIES_CARD")
@click.option("--frame", "frame_card", type=click.Path(dir_okay=False, path_type=Path), help="Frame card.")
@click.option("--fixture", help="Fixture of the frame; left out: the one whose spans fit.")
@METHOD_FOLDERS
@click.option("--strength", type=float, help="Mean strength, MPa.")
@click.option("--weibull", type=float, help="Weibull modulus.")
@click.option("--modulus", type=float, help="Young's modulus, GPa.")
@click.option("--poisson", type=float, help="Poisson's ratio.")
@click.option("--span", type=float, help="Support span, mm; the load span keeps its share.")
@click.option("--load-span", type=float, help="Load span, mm; 0: 3-point.")
@click.option("--width", type=float, help="Width, mm.")
@click.option("--thickness", type=float, help="Thickness in the loading direction, mm.")
@click.option("--diameter", type=float, help="Diameter of a rod or tube, mm.")
@click.option("--speed", type=float, help="Crosshead speed, mm/min.")
@click.option("--force-rate", type=float, help="Force rate, N/s.")
@click.option("--stress-rate", type=float, help="Stress rate, MPa/s.")
@click.option("--stiffness", type=click.FloatRange(0, min_open=True), help="Stiffness of the frame, N/mm.")
@click.option("--capacity", type=click.FloatRange(0, min_open=True), help="Capacity of the cell, N.")
@click.option(
    "--verified",
    type=click.FloatRange(0),
    nargs=2,
    default=None,
    help="Lowest and highest verified force, N.",
)
@click.option("--sample-rate", type=click.FloatRange(0, min_open=True), help="Samples per second.")
@click.option("--time-constant", type=click.FloatRange(0), help="First-order lag of the force chain, s.")
@click.option("--bandwidth", type=click.FloatRange(0, min_open=True), help="Bandwidth of the amplifier, Hz.")
@click.option("--bars", type=click.IntRange(1, BARS_MAX), help="Number of bars.")
@click.option(
    "--seed", type=click.IntRange(0, 2**63 - 1), help="Seed of the firing order; left out: drawn and told."
)
@click.option(
    "--order", type=click.Path(dir_okay=False, path_type=Path), help="Write the firing order as CSV."
)
@click.option("--accept", help="'NAME: reason': who takes the blocked gates on, and why.")
@click.option("--json", "as_json", is_flag=True, help="As JSON instead of text.")
@click.pass_context
def command(ctx: click.Context, /, **given: object) -> None:
    """Plan a series: break loads, deflection, achieved rate, time, energy, gates, and what could be better.

    METHOD is a name of `midspan methods` or the file of a method or series card (then with the mean sizes of its bars).
    Values that are left out come from the cards; those of a shipped card's material are examples. Exit code 1: a gate
    is blocked and nobody accepted it.

    \b
    Example: midspan plan C1161-B --frame frame.toml --strength 383 --weibull 12 --modulus 380 --bars 30
    Example: midspan plan series.toml --frame frame.toml --order order.csv --json
    """
    accepted = _accepted(ctx.params["accept"])
    subject = _subject(ctx.params)
    frame = None if ctx.params["frame_card"] is None else load_frame(ctx.params["frame_card"])
    bench, spans = _bench(ctx.params, frame, subject)
    plan = make_plan(subject.method, bench, spans)
    refused = refusal(plan)
    if refused is not None:
        raise MidspanError(f"{subject.method.name}: {refused}")
    bars = len(subject.bars) or None
    found = findings(plan, bars)
    advice = suggest(plan)
    seed, turns = _order(ctx.params, subject.bars)
    blocked = [one for one in found if one.gate is Gate.BLOCKED]
    if ctx.params["as_json"]:
        data = plan_data(plan, found, advice)
        data |= {"bars": bars, "seed": seed, "order": [turn.number for turn in turns]}
        click.echo(
            json.dumps({**data, "accepted": accepted, "blocked": len(blocked)}, indent=1, allow_nan=False)
        )
    else:
        click.echo("\n".join(plan_lines(plan, found, advice)))
        if seed is not None:
            click.echo("\n" + "\n".join(order_lines(turns, seed)))
        if blocked and accepted:
            click.echo(f"\nblocked gates accepted by {accepted}")
    if blocked and not accepted:
        raise MidspanError(_blocked_line(blocked))
    if seed is not None and ctx.params["order"] is not None:
        _write_order(ctx.params["order"], order_csv(turns, seed))


def _subject(params: dict[str, object]) -> Subject:
    """The method with this call's changes, and the bars."""
    name = str(params["method"])
    changes = {key: value for option, key in CHANGES.items() if isinstance(value := params[option], float)}
    count = params["bars"]
    if Path(name).is_file() and read_tree(Path(name)).get("card") == "series":
        if count is not None:
            raise click.UsageError("--bars is for a method; a series card has its bars in the bench sheet")
        loaded = load_series(name)
        bars = tuple((bar.number, bar.batch) for bar in loaded.specimens)
        method = measured_method(loaded.method, loaded.specimens)
        return Subject(changed_method(method, changes), loaded.fixture, bars)
    folders = params["methods"]
    assert isinstance(folders, tuple)
    method = find_method(name, method_folders(folders)).card
    width = len(str(count))
    numbered = tuple((f"{n:0{width}d}", "") for n in range(1, count + 1)) if isinstance(count, int) else ()
    return Subject(changed_method(method, changes), None, numbered)


def _bench(
    params: dict[str, object], frame: FrameCard | None, subject: Subject
) -> tuple[Bench, Spans | None]:
    """The frame card's bench with this call's figures over it."""
    bench, spans = Bench(), None
    if frame is not None:
        bench, spans = bench_of(frame, _fixture(params["fixture"], frame, subject))
    elif params["fixture"] is not None:
        raise click.UsageError("--fixture is the name of a fixture of a frame card: add --frame")
    number = {key: value for key in ("stiffness", "capacity", "sample_rate", "time_constant", "bandwidth")
              if isinstance(value := params[key], float)}  # fmt: skip
    given: dict[str, Any] = {}
    if "stiffness" in number:
        given |= {
            "stiffness_n_mm": number["stiffness"],
            "stiffness_source": "given",
            "stiffness_measured": True,
        }
    if "capacity" in number:
        given["capacity_n"] = number["capacity"]
    if "sample_rate" in number:
        given["rate_hz"] = number["sample_rate"]
    if "time_constant" in number or "bandwidth" in number:
        lag_s, source = lag_of(number.get("time_constant"), number.get("bandwidth"))
        given |= {"time_constant_s": lag_s, "lag_source": source}
    verified = params["verified"]
    if isinstance(verified, tuple):
        if not verified[0] < verified[1]:
            raise click.UsageError("--verified takes the lowest force first, then the highest, N")
        given["verified_n"] = verified
    return replace(bench, **given), spans


def _fixture(named: object, frame: FrameCard, subject: Subject) -> str:
    """The named fixture, the series' own, or the only one that fits."""
    name = named if isinstance(named, str) else subject.fixture
    if name is None:
        fitting = fitting_fixtures(frame, subject.method)
        if len(fitting) == 1:
            return fitting[0]
        if fitting:
            raise MidspanError(
                f"several fixtures of frame {frame.name} fit: {', '.join(fitting)}; name one with --fixture"
            )
        name = frame.fixtures[0].name
    tree = {**subject.method.model_dump(), "fixture": name}
    faults = [fault for fault in fit_faults(frame, subject.method, name) if fault.path[0] in SPAN_KEYS]
    raise_faults(fault.line("plan", tree) for fault in faults)
    return name


def _order(params: dict[str, object], bars: Sequence[tuple[str, str]]) -> tuple[int | None, tuple[Turn, ...]]:
    """Seed and order; none without bars."""
    if not bars:
        if params["order"] is not None or params["seed"] is not None:
            raise click.UsageError("a firing order needs bars: add --bars, or name a series card")
        return None, ()
    seed = params["seed"]
    chosen = seed if isinstance(seed, int) else secrets.randbits(SEED_BITS)
    return chosen, firing_order(bars, chosen)


def _accepted(text: object) -> str | None:
    if text is None:
        return None
    if not ACCEPT.fullmatch(str(text)):
        raise click.UsageError("--accept takes 'NAME: reason', both of them")
    return str(text)


def _blocked_line(blocked: Sequence[Finding]) -> str:
    names = ", ".join(dict.fromkeys(one.name for one in blocked))
    count = "a gate is" if len(blocked) == 1 else f"{len(blocked)} gates are"
    return f"{count} blocked ({names}): mend it, or say who takes it on with --accept 'NAME: reason'"


def _write_order(path: Path, text: str) -> None:
    """A plan that was written once is never overwritten."""
    try:
        with path.open("x", encoding="utf-8") as file:
            file.write(text)
    except FileExistsError as error:
        raise MidspanError(f"{path}: is there already and is not overwritten; choose another name") from error
