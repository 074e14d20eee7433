"""The report's pages about how it was made: uncertainty, method card and its status, frame card, versions, digests."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator

from daq.cards.frame import Fixture, FrameCard
from daq.cards.method import MethodCard
from daq.series.bars import COMMON
from daq.series.blocks import Facts, Grid, Lines, Section, Tone
from daq.series.leaf import Series
from daq.series.words import NONE, digits, listed, number

SURE = ("checked",)


def uncertainty_section(series: Series) -> Section:
    """Mean over the bars of each contributor; what is not in is named; one-sided terms apart."""
    budgets = [leaf.standing.result.get("uncertainty") for leaf in series.leaves]
    known = [budget for budget in budgets if isinstance(budget, dict)]
    if not known:
        return Section(
            "Uncertainty of measurement",
            (Lines(("No bar has an uncertainty: sizes, spans or load missing.",)),),
        )
    names = dict.fromkeys(part["name"] for budget in known for part in budget["contributors"])
    shares = {
        name: [part["percent"] for budget in known for part in budget["contributors"] if part["name"] == name]
        for name in names
    }
    rows = tuple(
        (
            name,
            digits(sum(found) / len(found), 2),
            digits(max(found), 2),
            "all bars alike" if name in COMMON else "each bar",
        )
        for name, found in shares.items()
    )
    totals = [leaf.value("strength_u_k2_percent") for leaf in series.leaves]
    whole = [value for value in totals if value is not None]
    lines = [
        f"Expanded uncertainty of one strength, k = {known[0]['coverage_factor']:g}: "
        f"{digits(min(whole), 2)} to {digits(max(whole), 2)} %. Method: GUM, first order, contributors independent."
    ]
    left = dict.fromkeys(name for budget in known for name in budget["not_included"])
    lines.append("Not included: " + ("; ".join(left) if left else "nothing that is known of") + ".")
    sided = dict.fromkeys(
        f"{part['name']}, up to {digits(part['percent'], 2)} %"
        for budget in known
        for part in budget["one_sided_lower"]
    )
    if sided:
        lines.append(f"One-sided, not in the ±: the true stress may be lower by {'; '.join(sided)}.")
    grid = Grid(("contributor, standard, % of strength", "mean", "largest", "same error for"), rows,
                (2.4, 0.8, 0.8, 1.2), frozenset({0, 3}))  # fmt: skip
    return Section("Uncertainty of measurement", (grid, Lines(tuple(lines))))


def method_section(series: Series) -> Section:
    """The card as resolved in the records, and how far its values were compared with the standard."""
    method = series.method
    if method is None:
        return Section("Method card", (Lines(("No method card could be read.",), Tone.LOUD),))
    return Section(
        "Method card", (Lines(tuple(_status(method)), Tone.CAUTION), Facts(tuple(_method_facts(method))))
    )


def _status(method: MethodCard) -> Iterator[str]:
    marks = Counter(clause.mark for clause in method.clauses)
    if not method.clauses:
        yield "Method values not checked against the standard: the card names no sources."
        return
    told = ", ".join(f"{n} {mark}" for mark, n in marks.items())
    if set(marks) <= set(SURE):
        yield f"Every value with a source was checked by a person: {told}."
    else:
        yield f"Method values not checked against the standard where not marked so: {told}, of {len(method.clauses)}."


def _method_facts(method: MethodCard) -> Iterator[tuple[str, str]]:
    yield "card", f"{method.name}  {method.title}".strip()
    if method.standard:
        yield "standard", f"{method.standard} {method.edition}".strip()
    yield (
        "loading",
        f"{method.geometry}, support span {method.support_span_mm:g} mm, section {method.section}",
    )
    rate = method.rate
    wanted = {
        "crosshead": (rate.speed_mm_min, "mm/min"),
        "force": (rate.rate_n_s, "N/s"),
        "stress": (rate.rate_mpa_s, "MPa/s"),
    }
    value, unit = wanted[rate.mode]
    yield (
        "rate",
        f"{rate.mode} {NONE if value is None else format(value, 'g')} {unit}, held by the {rate.loop}",
    )
    if method.time_to_break_s is not None:
        yield "time to break", f"{method.time_to_break_s[0]:g} to {method.time_to_break_s[1]:g} s"
    place = method.validity.break_place
    near = f"near (up to {place.near_percent:g} %): {place.near}; beyond: {place.beyond}"
    yield (
        "break counts",
        "anywhere: the card has no rule" if place.region == "anywhere" else f"{place.region}; {near}",
    )
    yield "reported peak", method.peak
    yield "chamfer", f"{method.chamfer_mm:g} mm"


def frame_section(series: Series) -> Section:
    """Each frame and fixture that was used, with its verification and what it says of itself."""
    blocks: list[Lines | Facts] = []
    last = max((str(leaf.meta["created_utc"]) for leaf in series.leaves), default="")
    frames: dict[str, FrameCard] = {}
    fixtures: dict[str, Fixture] = {}
    for leaf in series.leaves:
        setup = leaf.standing.setup
        if setup.frame is not None:
            frames.setdefault(setup.frame.name, setup.frame)
        if setup.fixture is not None:
            fixtures.setdefault(setup.fixture.name, setup.fixture)
    for frame in frames.values():
        due = frame.cell.verified_due
        if due is None or due.isoformat() < last[:10]:
            word = "has no date on the card" if due is None else f"was due on {due.isoformat()}"
            blocks.append(
                Lines(
                    (f"Verification of the cell of {frame.name} {word}: no accredited report.",), Tone.CAUTION
                )
            )
        blocks.append(Facts(tuple(_frame_facts(frame))))
    blocks += [Facts(tuple(_fixture_facts(fixture))) for fixture in fixtures.values()]
    return Section(
        "Frame card and fixture", tuple(blocks) or (Lines(("No frame card could be read.",), Tone.LOUD),)
    )


def _frame_facts(frame: FrameCard) -> Iterator[tuple[str, str]]:
    cell = frame.cell
    yield "frame", f"{frame.name}  {frame.title}".strip() + ("  (virtual)" if frame.simulated else "")
    yield "cell", f"{cell.serial}, {cell.capacity_n:g} N, under the {cell.position}"
    verified = f"{cell.verified_min_n:g} to {cell.verified_max_n:g} N"
    on, due = cell.verified_on, cell.verified_due
    yield "verified", f"{verified}, on {on or 'no date'}, due {due or 'no date'}"
    yield "force reading", f"uncertain by {cell.uncertainty_percent:g} % (k = 2)"
    lag = "not known" if cell.time_constant_s is None else f"{1e3 * cell.time_constant_s:g} ms"
    yield "lag of the force chain", lag
    yield "sample rate", ", ".join(f"{link.name} {link.rate_hz:g} S/s" for link in frame.links)
    table = frame.compliance
    yield (
        "compliance",
        "none"
        if table is None
        else f"{len(table.points)} nodes, fixture {table.fixture}, {table.measured_on or 'no date'}",
    )


def _fixture_facts(fixture: Fixture) -> Iterator[tuple[str, str]]:
    yield (
        "fixture",
        f"{fixture.name}, {fixture.geometry}, rollers {fixture.rollers}, {fixture.roller_diameter_mm:g} mm",
    )
    spans = f"{fixture.support_span_mm:g} ± {fixture.support_span_u_mm:g} mm"
    if fixture.load_span_mm:
        spans += f" and {fixture.load_span_mm:g} ± {fixture.load_span_u_mm:g} mm"
    yield "spans as measured", f"{spans} (half-width of a rectangular distribution)"


def seal_section(series: Series) -> Section:
    """One row a record: who wants to check has the digest of the file and the head of its notes."""
    rows = tuple(
        (
            leaf.name,
            str(leaf.meta.get("sha256", NONE)),
            f"{leaf.notes}  {leaf.head[:12]}" if leaf.notes else "0",
        )
        for leaf in series.leaves
    )
    versions = listed(str(leaf.meta.get("midspan_version") or "") for leaf in series.leaves)
    samples = sum(int(leaf.value("samples") or 0) for leaf in series.leaves)
    gaps = sum(leaf.gaps for leaf in series.leaves)
    return Section(
        "Records",
        (
            Facts((
                ("sealed by midspan", versions),
                ("samples", f"{number(float(samples), 0)} in all, {gaps} gaps listed in the records"),
            )),
            Grid(("record", "SHA-256 of the file", "notes, chain head"), rows, (1.3, 4.2, 1.15), frozenset({0, 1, 2})),
            Lines(("midspan verify checks a record and its notes; sha256sum -c SHA256SUMS does without midspan.",)),
        ),
    )  # fmt: skip
