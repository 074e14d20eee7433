"""Gates of a plan: what would go wrong, said before a bar is cut. Each gate is one line with its figures.

The limits are judgement of the trade unless a line says otherwise.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from enum import Enum

from daq.results.quiet import alias_hz
from daq.series.plan import Plan

SAMPLING_GREEN, SAMPLING_CAUTION = 1e-3, 5e-3  # (sample interval/2 + lag) over time to break
WORKING_SHARE = 0.8  # of capacity and fixture rating
SLENDERNESS_REFUSED, SLENDERNESS_LOW, SLENDERNESS_HIGH = 5.0, 10.0, 60.0
NOISE_RATIO_MIN, SAMPLES_MIN, LAG_SHARE_MAX = 100.0, 50.0, 0.02  # break detection
MACHINE_SHARE_MAX = 0.5  # a modulus from the crosshead needs the bar to be the larger part
PRELOAD_SHARE_MAX = 0.1  # of P1
TIME_SHARE_MAX = 0.05  # bars that may break outside the method's time window
MAINS_HZ = (50.0, 60.0)
BARS_WEIBULL, BARS_MEAN = 10, 5


class Gate(Enum):
    """How a plan stands at one gate."""

    OPEN = "ok"
    CAUTION = "caution"
    BLOCKED = "blocked"
    UNKNOWN = "not known"


@dataclass(frozen=True, slots=True)
class Finding:
    """One gate: its name, how it stands, the figures in one line."""

    name: str
    gate: Gate
    text: str


def refusal(plan: Plan) -> str | None:
    """Why there is no plan at all: L/h below 5 is no beam, unless a standard has just that shape (concrete, stone)."""
    ratio = plan.span_per_thickness
    if ratio >= SLENDERNESS_REFUSED or plan.method.standard:
        return None
    return (
        f"span over thickness is {ratio:.3g}: below {SLENDERNESS_REFUSED:g} the flexure formula does not hold; "
        "choose a longer span or a thinner bar, or name the card of a standard that has this shape"
    )


def findings(plan: Plan, bars: int | None = None) -> tuple[Finding, ...]:
    """Every gate, in the order in which a person would mend them."""
    parts: tuple[Callable[[Plan], Iterator[Finding]], ...] = (
        shape, capacity, sampling, detection, speed, strain_rate, time_window, preload, modulus, scope, hum,
    )  # fmt: skip
    found = [finding for part in parts for finding in part(plan)]
    found.extend(bar_count(plan, bars))
    return tuple(found)


def shape(plan: Plan) -> Iterator[Finding]:
    """Where elementary flexure is less exact, and what the method itself allows."""
    ratio, method = plan.span_per_thickness, plan.method
    text = f"span over thickness {ratio:.3g}"
    if not SLENDERNESS_LOW <= ratio <= SLENDERNESS_HIGH:
        usual = f"usual are {SLENDERNESS_LOW:g} to {SLENDERNESS_HIGH:g}"
        yield Finding("shape", Gate.CAUTION, f"{text}; {usual}: elementary flexure is less exact")
    else:
        yield Finding("shape", Gate.OPEN, text)
    window = method.validity.span_per_thickness
    if window is not None and not window[0] <= ratio <= window[1]:
        asked = f"the method wants {window[0]:g} to {window[1]:g}"
        yield Finding("shape", Gate.BLOCKED, f"{text}: {asked}")


def capacity(plan: Plan) -> Iterator[Finding]:
    """P1 above the lowest verified force, P99.9 below 80 % of cell and fixture; shares of the series told."""
    bench = plan.bench
    if bench.capacity_n is None and bench.verified_n is None:
        yield Finding("capacity", Gate.UNKNOWN, "no cell: name a frame card or --capacity")
        return
    low, high = plan.at("P1").load_n, plan.at("P99.9").load_n
    if bench.verified_n is not None:
        floor_n, top_n = bench.verified_n
        below, above = plan.share_below(floor_n), 1.0 - plan.share_below(top_n)
        text = f"{share(below)} of the bars below the lowest verified force of {newtons(floor_n)}"
        yield Finding("capacity", Gate.OPEN if low > floor_n else Gate.BLOCKED, f"{text} (P1 {newtons(low)})")
        if high > top_n:
            text = f"{share(above)} of the bars above the highest verified force of {newtons(top_n)}"
            yield Finding("capacity", Gate.BLOCKED, f"{text} (P99.9 {newtons(high)})")
    for what, limit_n in (
        ("the cell's capacity", bench.capacity_n),
        ("the fixture's rating", bench.rating_n),
    ):
        if limit_n is not None:
            allowed_n = WORKING_SHARE * limit_n
            over = share(1.0 - plan.share_below(allowed_n))
            text = f"{over} of the bars above 80 % of {what} of {newtons(limit_n)} (P99.9 {newtons(high)})"
            yield Finding("capacity", Gate.OPEN if high < allowed_n else Gate.BLOCKED, text)
    part = validity_range(plan)
    if part is not None:
        yield part


def validity_range(plan: Plan) -> Finding | None:
    """The part of the cell's range that the method allows (mortar: the upper four fifths)."""
    window, capacity_n = plan.method.validity.force_range_percent, plan.bench.capacity_n
    if window is None or capacity_n is None:
        return None
    low_n, high_n = (end / 100.0 * capacity_n for end in window)
    outside = plan.share_below(low_n) + 1.0 - plan.share_below(high_n)
    inside = low_n < plan.at("P1").load_n and plan.at("P99.9").load_n < high_n
    part = f"{newtons(low_n)} to {newtons(high_n)}, the part of the range that the method allows"
    text = f"{share(outside)} of the bars outside {part}"
    return Finding("capacity", Gate.OPEN if inside else Gate.BLOCKED, text)


def sampling(plan: Plan) -> Iterator[Finding]:
    """(half a sample interval + lag)/time to break: below 0.1 % ok, below 0.5 % caution, else blocked (B4)."""
    bench, time_s = plan.bench, plan.mean.time_s
    if bench.rate_hz is None:
        yield Finding("sampling", Gate.UNKNOWN, "no sample rate: name a frame card or --sample-rate")
        return
    lag_s = bench.time_constant_s
    total = (0.5 / bench.rate_hz + (lag_s or 0.0)) / time_s
    lag = "lag not known" if lag_s is None else f"lag {1e3 * lag_s:.3g} ms ({bench.lag_source})"
    text = f"half a sample and lag are {percent(total)} of {time_s:.3g} s to break; {lag}"
    gate = Gate.OPEN if total < SAMPLING_GREEN else Gate.CAUTION if total < SAMPLING_CAUTION else Gate.BLOCKED
    if lag_s is None and gate is Gate.OPEN:
        gate = Gate.CAUTION
    yield Finding("sampling", gate, text)


def detection(plan: Plan) -> Iterator[Finding]:
    """Whether noise, rate and lag let the fracture watch work as measured."""
    bench, typical = plan.bench, plan.mean
    weak: list[str] = []
    if bench.noise_n is not None and bench.noise_n > 0:
        ratio = typical.load_n / bench.noise_n
        if ratio < NOISE_RATIO_MIN:
            weak.append(f"load over noise {ratio:.0f}, needs {NOISE_RATIO_MIN:g}")
    if bench.rate_hz is not None and typical.time_s * bench.rate_hz < SAMPLES_MIN:
        weak.append(f"{typical.time_s * bench.rate_hz:.0f} samples before the break, needs {SAMPLES_MIN:g}")
    if bench.time_constant_s is not None and bench.time_constant_s > LAG_SHARE_MAX * typical.time_s:
        weak.append(
            f"lag {percent(bench.time_constant_s / typical.time_s)} of the time to break, needs below 2 %"
        )
    if weak:
        yield Finding("detection", Gate.CAUTION, "break detection limited: " + "; ".join(weak))


def speed(plan: Plan) -> Iterator[Finding]:
    """The drive must be able to move so slowly or so fast."""
    window = plan.bench.speed_mm_min
    if window is not None and not window[0] <= plan.speed_mm_min <= window[1]:
        text = (
            f"{plan.speed_mm_min:.3g} mm/min needed, the frame moves at {window[0]:g} to {window[1]:g} mm/min"
        )
        yield Finding("speed", Gate.BLOCKED, text)


def strain_rate(plan: Plan) -> Iterator[Finding]:
    """The method's window of the strain rate on a rigid frame."""
    window = plan.method.validity.strain_rate_per_s
    if window is None:
        return
    inside = window[0] <= plan.strain_rate_per_s <= window[1]
    text = f"{plan.strain_rate_per_s:.3g} 1/s on a rigid frame; the card has {window[0]:.2g} to {window[1]:.2g} 1/s"
    yield Finding("strain rate", Gate.OPEN if inside else Gate.CAUTION, text)


def time_window(plan: Plan) -> Iterator[Finding]:
    """Share of the bars that would break too early or too late for the method."""
    window = plan.method.time_to_break_s
    if window is not None:
        early, late = plan.share_before(window[0]), 1.0 - plan.share_before(window[1])
        text = f"{share(early)} of the bars before {window[0]:g} s, {share(late)} after {window[1]:g} s"
        typical_inside = window[0] <= plan.mean.time_s <= window[1]
        gate = (
            Gate.BLOCKED
            if not typical_inside
            else Gate.OPEN
            if early + late <= TIME_SHARE_MAX
            else Gate.CAUTION
        )
        yield Finding("time to break", gate, text)
    longest_s, limit_s = plan.at("P99.9").time_s, plan.method.limits.run_s_max
    if longest_s > limit_s:
        text = f"P99.9 after {longest_s:.3g} s, but the run is stopped after {limit_s:g} s (limits.run_s_max)"
        yield Finding("time to break", Gate.BLOCKED, text)


def preload(plan: Plan) -> Iterator[Finding]:
    """Seating force against the weakest bar of a hundred (slow crack growth while it is held)."""
    seat_n = plan.method.preload.seat_percent / 100.0 * plan.at("P50").load_n
    weak_n = plan.at("P1").load_n
    if seat_n > PRELOAD_SHARE_MAX * weak_n:
        text = f"{newtons(seat_n)} is {percent(seat_n / weak_n)} of P1 ({newtons(weak_n)}), at most 10 %"
        yield Finding("preload", Gate.BLOCKED, text)


def modulus(plan: Plan) -> Iterator[Finding]:
    """What share of the crosshead's travel is the machine's: above a half, no modulus from it."""
    told = f"the bar bends {plan.mean.bar_um:.3g} of {plan.mean.travel_um:.4g} um of crosshead travel"
    if math.isinf(plan.bench.stiffness_n_mm):
        return
    if plan.machine_share > MACHINE_SHARE_MAX:
        gate = Gate.BLOCKED if plan.method.modulus == "crosshead" else Gate.CAUTION
        yield Finding("modulus", gate, f"{told}: no modulus from the crosshead; use a sensor at the bar")
    elif plan.method.modulus == "crosshead" and not plan.bench.stiffness_measured:
        text = f"{told}, but no compliance table: no modulus from the crosshead"
        yield Finding("modulus", Gate.BLOCKED, text)


def scope(plan: Plan) -> Iterator[Finding]:
    """Limits of the method itself: weak materials, large strain, tiles too strong for a stress."""
    validity, strength = plan.method.validity, plan.method.expected.strength_mpa
    if validity.strength_mpa_min is not None and strength < validity.strength_mpa_min:
        text = f"{strength:g} MPa is below {validity.strength_mpa_min:g} MPa, the method's lower limit"
        yield Finding("scope", Gate.CAUTION, text)
    strain = 100.0 * plan.at("P99.9").stress_mpa / (1e3 * plan.method.expected.modulus_gpa)
    if validity.strain_percent_max is not None and strain > validity.strain_percent_max:
        text = f"P99.9 breaks at {strain:.2g} % strain, the method ends at {validity.strain_percent_max:g} %"
        yield Finding("scope", Gate.CAUTION, text)
    own_n, limit_n = plan.breaking_strength_n, validity.breaking_strength_n_max
    if own_n is not None and limit_n is not None:
        over = 1.0 - plan.share_below(limit_n * plan.mean.load_n / own_n)
        beyond = f"{share(over)} of the tiles reach {newtons(limit_n)} and get no stress"
        text = f"breaking strength {newtons(own_n)}; {beyond}"
        yield Finding("scope", Gate.OPEN if over < 0.01 else Gate.CAUTION, text)


def hum(plan: Plan) -> Iterator[Finding]:
    """Mains hum that a slow sample rate folds to another frequency."""
    rate_hz = plan.bench.rate_hz
    if rate_hz is None:
        return
    folded = [
        f"{true:g} Hz shows as {alias_hz(true, rate_hz):g} Hz" for true in MAINS_HZ if 2.0 * true > rate_hz
    ]
    if folded:
        yield Finding("hum", Gate.CAUTION, f"at {rate_hz:g} samples/s {' and '.join(folded)}")


def bar_count(plan: Plan, bars: int | None) -> Iterator[Finding]:
    """Fewer bars than the method or the statistics want."""
    if bars is None:
        return
    validity = plan.method.validity
    least, weibull = validity.bars_min or BARS_MEAN, validity.bars_weibull_min or BARS_WEIBULL
    if bars < least:
        yield Finding("bars", Gate.CAUTION, f"{bars} bars; at least {least} for a mean")
    elif bars < weibull:
        yield Finding(
            "bars", Gate.CAUTION, f"{bars} bars: enough for a mean; {weibull} for a Weibull estimate"
        )
    else:
        yield Finding("bars", Gate.OPEN, f"{bars} bars")


def share(part: float) -> str:
    """A share of the series in per cent, as few digits as are true."""
    if part < 5e-5:
        return "less than 0.01 %"
    return f"{100.0 * part:.2g} %" if part < 0.1 else f"{100.0 * part:.1f} %"


def newtons(load_n: float) -> str:
    return f"{load_n:.0f} N" if load_n >= 1000.0 else f"{load_n:.3g} N"


def percent(part: float) -> str:
    return f"{100.0 * part:.2g} %"
