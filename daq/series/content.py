"""What a series report says, as blocks: the same for HTML and PDF, the same for the same records. No clock in here.

All bars are listed, those that do not count too; every estimate stands with its method, its N and its bounds.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator

from daq.results.rules import Counting
from daq.series.analysis import LEVELS, Estimate
from daq.series.blocks import Facts, Grid, Lines, Picture, Report, Section, Tone
from daq.series.compare import Ratio
from daq.series.content_bars import bars_section, remarks_section
from daq.series.content_setup import frame_section, method_section, seal_section, uncertainty_section
from daq.series.leaf import Series
from daq.series.required import missing_fields
from daq.series.words import NONE, chance, digits, listed, number, one_or_range, span, stress

FEW = 10  # bars: from here on k = 2 covers 92 % and more

SIMULATED, INCOMPLETE = "SIMULATED DATA", "INCOMPLETE"


def report_of(series: Series, against: tuple[str, tuple[Ratio, ...] | str] | None = None) -> Report:
    """against: name of another series and how this one compares with it."""
    missing = missing_fields(series)
    marks = [SIMULATED] if series.simulated else []
    if missing:
        marks.append(INCOMPLETE)
    sections = [
        Section("What was tested", tuple(_identity(series, missing))),
        Section("Strength of the series", tuple(_strength(series))),
        Section("Trends and breaks", tuple(_trends(series))),
    ]
    if against is not None:
        sections.append(Section(f"Beside series {against[0]}", tuple(_beside(against[1]))))
    sections += [
        bars_section(series),
        remarks_section(series),
        uncertainty_section(series),
        method_section(series),
        frame_section(series),
        seal_section(series),
    ]
    return Report(f"Series {series.title}", _subtitle(series), tuple(marks), tuple(sections))


def _subtitle(series: Series) -> str:
    kinds = Counter(leaf.standing.verdict.counting for leaf in series.leaves)
    parts = [f"{kinds[kind]} {kind.value}" for kind in Counting if kinds[kind]]
    return f"{len(series.leaves)} loadings: " + ", ".join(parts)


def _identity(series: Series, missing: tuple[str, ...]) -> Iterator[Lines | Facts]:
    if series.simulated:
        yield Lines(("These numbers come from a virtual frame, not from specimens.",), Tone.LOUD)
    if missing:
        yield Lines(
            (f"Incomplete: not recorded, though a report must hold it: {'; '.join(missing)}.",), Tone.LOUD
        )
    if series.left_out:
        yield Lines(tuple(f"Left out: {line}" for line in series.left_out), Tone.LOUD)
    runs = [leaf.standing.cards.get("run") or {} for leaf in series.leaves]
    days = sorted(str(leaf.meta["created_utc"]) for leaf in series.leaves)
    setups = [leaf.standing.setup for leaf in series.leaves]
    frames = [setup.frame for setup in setups]
    specimens = [leaf.standing.cards.get("specimen") or {} for leaf in series.leaves]
    broken = [leaf for leaf in series.leaves if leaf.value("strength_mpa") is not None]
    yield Facts((
        ("material", listed(str(run.get("material") or "") for run in runs)),
        ("operator", listed(str(run.get("operator") or "") for run in runs)),
        ("loaded", f"{days[0][:16]} to {days[-1][:16]} UTC" if days else NONE),
        ("frame", listed("" if frame is None else f"{frame.name}  {frame.title}".strip() for frame in frames)),
        ("method", listed("" if setup.method is None else setup.method.name for setup in setups)),
        ("fixture", listed(str(run.get("fixture") or "") for run in runs)),
        ("batch", listed(str(one.get("batch") or "") for one in specimens)),
        ("temperature", one_or_range([_plain(run.get("temperature_c")) for run in runs], 1, "°C")),
        ("relative humidity", one_or_range([_plain(run.get("humidity_percent")) for run in runs], 0, "%")),
        ("stress rate", one_or_range([leaf.value("stress_rate_mean_mpa_s") for leaf in broken], 2, "MPa/s, achieved")),
        ("time to break", one_or_range([leaf.value("time_to_break_s") for leaf in broken], 1, "s")),
    ))  # fmt: skip


def _plain(value: object) -> float | None:
    return None if isinstance(value, bool) or not isinstance(value, int | float) else float(value)


# --- strength


def _strength(series: Series) -> Iterator[Lines | Facts | Grid | Picture]:
    found, method = series.analysis, series.method
    if found.reasons:
        yield Lines(tuple(found.reasons), Tone.CAUTION)
    if found.summary is not None:
        s = found.summary
        spread = stress(s.spread_mpa, method)
        scatter = NONE if s.spread_mpa is None else f"{spread} MPa (N - 1), scatter of the bars"
        rows = [
            ("bars in the statistics", _in_statistics(series)),
            ("mean", f"{stress(s.mean_mpa, method)} MPa, N = {s.n}"),
            ("standard deviation", scatter),
            ("median, lowest, highest",
             ", ".join(stress(v, method) for v in (s.median_mpa, s.min_mpa, s.max_mpa)) + " MPa"),
        ]  # fmt: skip
        if found.mean is not None:
            rows.append(("uncertainty of the mean", _of_mean(series)))
        yield Facts(tuple(rows))
    estimates = [one for one in (found.weibull, *found.populations) if one is not None]
    if estimates:
        yield Grid(
            ("Weibull", "m", *(f"m, {100 * level:.0f} %" for level in LEVELS), "m unbiased", "σ₀ MPa",
             *(f"σ₀ MPa, {100 * level:.0f} %" for level in LEVELS)),
            tuple(_estimate_row(one) for one in estimates),
            (1.2, 0.6, 1.2, 1.2, 0.9, 0.8, 1.4, 1.4),
        )  # fmt: skip
        yield Lines(tuple(_estimate_words(one) for one in estimates))
    if estimates:
        yield Picture("weibull", "Points at (i - 0.5)/n; line by maximum likelihood; bars that did not break or do not "
                             "count stay in as suspended, open triangles.")  # fmt: skip
    if found.sizes is not None:
        yield from _scaling(series)
    if found.weibull is not None and found.more:
        ranges = [
            f"{n} bars more: {100 * low:.0f} to {100 * high:.0f} % of the estimate"
            for n, (low, high) in found.more.items()
        ]
        yield Lines((f"How many more: 95 % bounds of m would be, with {'; with '.join(ranges)}.",))


def _in_statistics(series: Series) -> str:
    found = series.analysis
    text = f"{len(found.counted)} that broke and count"
    kinds = Counter(bar.counting for bar in found.suspended)
    if kinds:
        text += ", suspended at their highest stress: " + ", ".join(
            f"{n} {kind.value}" for kind, n in kinds.items()
        )
    open_ = sum(bar.counting is Counting.PROVISIONAL for bar in found.counted)
    return text + (f"; {open_} of these are provisional" if open_ else "")


def _of_mean(series: Series) -> str:
    mean = series.analysis.mean
    assert mean is not None
    parts = f"s/√N {digits(mean.scatter_mpa, 3)} MPa; force and spans, common to all, {digits(mean.common_mpa, 3)} MPa"
    total = mean.total_k2_mpa
    if total is None:
        return f"not complete: {parts}"
    return f"± {digits(total, 2)} MPa (k = 2), from {parts}{_of_few(series)}"


def _of_few(series: Series) -> str:
    """What k = 2 covers where the scatter is known from few bars: Student's t, N - 1 (GUM JCGM 100, annex G.3)."""
    from scipy.special import stdtr

    summary = series.analysis.summary
    if summary is None or not 2 <= summary.n < FEW:
        return ""
    covered = 1.0 - 2.0 * float(stdtr(summary.n - 1, -2.0))
    return f"; with N = {summary.n} that covers about {100.0 * covered:.0f} %, not 95 %"


def _estimate_row(one: Estimate) -> tuple[str, ...]:
    def of(level: float, key: str, decimals: int) -> str:
        bounds = one.bounds[level]
        return NONE if bounds is None else span(getattr(bounds, key), decimals)

    return (
        one.name, number(one.fit.modulus, 1), *(of(level, "modulus", 1) for level in LEVELS), number(one.unbiased, 1),
        digits(one.fit.scale_mpa, 4), *(of(level, "scale_mpa", 1) for level in LEVELS),
    )  # fmt: skip


def _estimate_words(one: Estimate) -> str:
    text = f"{one.name}: {one.method}."
    good = one.goodness
    if good is None:
        return f"{text} Goodness of fit: not judged with suspended bars."
    said = (
        "no doubt at the 10 % level" if good.doubt is None else f"doubt at the {100 * good.doubt:g} % level"
    )
    d, a2 = number(good.kolmogorov_d, 3), number(good.anderson_a2, 3)
    return (
        f"{text} Goodness of fit: Kolmogorov D = {d}, Anderson-Darling A² = {a2}: {said} (N = {one.fit.n})."
    )


def _scaling(series: Series) -> Iterator[Lines | Grid]:
    sizes = series.analysis.sizes
    assert sizes is not None
    level = f"{100 * sizes.level:.0f} %"
    yield Lines((
        f"Effective volume {digits(sizes.volume_mm3)} mm³, effective surface {digits(sizes.surface_mm2)} mm² of a bar "
        f"of mean size at m = {number(sizes.modulus, 1)}. Characteristic strength of 1 mm³ in uniform tension "
        f"{digits(sizes.unit_volume_mpa)} MPa (volume flaws), of 1 mm² {digits(sizes.unit_surface_mpa)} MPa (surface).",
    ))  # fmt: skip
    yield Grid(
        ("the same bars in", "flaws in the", "σ₀ MPa", f"by the {level} bounds of m"),
        tuple(
            (
                one.loading,
                one.flaws,
                digits(one.strength_mpa),
                f"{digits(one.low_mpa)} to {digits(one.high_mpa)}",
            )
            for one in sizes.scaled
        ),
        (1.6, 1.0, 0.8, 1.6),
        frozenset({0, 1}),
    )


# --- trends, breaks, comparison


def _trends(series: Series) -> Iterator[Lines | Grid | Picture]:
    found = series.analysis
    if found.cautions:
        yield Lines(found.cautions, Tone.CAUTION)
    yield Picture("order", "Strength in the order of loading; bars: uncertainty of measurement, k = 2.")
    if found.trends:
        yield Grid(
            ("strength against", "Spearman's ρ", "p, two-sided", "N"),
            tuple(
                (name, f"{trend.rho:+.2f}", chance(trend.p), str(trend.n))
                for name, trend in found.trends.items()
            ),
            (2.2, 1.0, 1.0, 0.6),
        )
    if found.map is None:
        yield Lines(("No break positions were entered: no break map.",))
    else:
        m = found.map
        yield Picture(
            "breakmap",
            "Break positions from mid-span against strength; dashed: load rollers, solid: supports.",
        )
        yield Lines((
            f"{m.left} left and {m.right} right of mid-span (two-sided binomial "
            f"p = {chance(m.p_one_sided)}, N = {m.n}); {m.outside_load_span} outside the load span; "
            f"{m.near_roller} within one diameter of a load roller.",
        ))  # fmt: skip
    if found.growth is not None:
        g = found.growth
        yield Lines((
            f"Slow crack growth (constant stress-rate testing, log-log regression of single bars): n = {number(g.n, 1)}"
            f" (standard deviation {number(g.n_sd, 1)}), D = {number(g.d_mpa, 1)} MPa (standard deviation "
            f"{number(g.d_sd_mpa, 1)}), correlation {number(g.correlation, 3)}.",
        ))  # fmt: skip


def _beside(ratios: tuple[Ratio, ...] | str) -> Iterator[Lines | Grid]:
    if isinstance(ratios, str):
        yield Lines((ratios,), Tone.CAUTION)
        return
    yield Grid(
        ("this series over the other", "ratio", "interval", "N", "differs"),
        tuple(
            (one.what, number(one.value, 3), span(one.interval, 3), f"{one.n[0]} and {one.n[1]}",
             "yes" if one.differs else "not shown")
            for one in ratios
        ),
        (1.8, 0.8, 1.4, 1.0, 0.8),
        frozenset({0, 4}),
    )  # fmt: skip
    yield Lines((f"{100 * ratios[0].level:.0f} % intervals by {ratios[0].method}.",))
