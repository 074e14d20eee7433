"""A plan in words and as plain data: the same figures, units in the words or in the names of the keys."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

from daq.series.gates import Finding
from daq.series.order import Turn
from daq.series.plan import Plan
from daq.series.suggest import Suggestion

COLUMNS = ("load N", "stress MPa", "bar um", "travel um", "time s", "energy mJ")
ORDER_PER_LINE = 10
PLAN_SCHEMA = 1


def plan_lines(plan: Plan, found: Sequence[Finding], advice: Suggestion) -> Iterator[str]:
    """The whole text, widest line below 120 characters."""
    yield from head_lines(plan)
    yield ""
    yield from break_lines(plan)
    yield ""
    yield from rate_lines(plan)
    yield from correction_lines(plan)
    yield ""
    width = max(len(one.gate.value) for one in found)
    yield from (f"{one.gate.value:>{width}}  {one.name}: {one.text}" for one in found)
    yield ""
    yield from advice_lines(plan, advice)


def head_lines(plan: Plan) -> Iterator[str]:
    method, expected = plan.method, plan.method.expected
    yield f"{method.name}: {method.title}" if method.title else method.name
    spans = f"{plan.spans.support_mm:g} mm" if plan.spans.load_mm == 0 else (
        f"{plan.spans.support_mm:g}/{plan.spans.load_mm:g} mm"
    )  # fmt: skip
    yield f"  {size_text(plan)} on {spans}, span over thickness {plan.span_per_thickness:.3g}"
    yield (
        f"  mean strength {expected.strength_mpa:g} MPa, Weibull modulus {expected.weibull_modulus:g}, "
        f"Young's modulus {expected.modulus_gpa:g} GPa"
    )
    bench = plan.bench
    where = f"frame {bench.name}, fixture {bench.fixture}; " if bench.name else ""
    frame = "rigid" if math.isinf(bench.stiffness_n_mm) else f"{bench.stiffness_n_mm:.5g} N/mm"
    yield f"  {where}bar {plan.bar_n_mm:.4g} N/mm, frame {frame} ({bench.stiffness_source})"


def size_text(plan: Plan) -> str:
    method = plan.method
    if method.section == "rectangle":
        return f"bar {method.width_mm:g} x {method.thickness_mm:g} mm (width x thickness)"
    bore = f", bore {method.inner_diameter_mm:g} mm" if method.section == "tube" else ""
    return f"{'tube' if bore else 'rod'} of {method.diameter_mm:g} mm{bore}"


def break_lines(plan: Plan) -> Iterator[str]:
    """One row a quantile; times run from contact, without a toe."""
    yield "          " + "".join(f"{name:>12}" for name in COLUMNS)
    for row in plan.breaks:
        figures = (row.load_n, row.stress_mpa, row.bar_um, row.travel_um, row.time_s, row.energy_mj)
        yield f"  {row.name:<8}" + "".join(f"{figure(value):>12}" for value in figures)


def rate_lines(plan: Plan) -> Iterator[str]:
    yield (
        f"stress rate {figure(plan.stress_rate_mpa_s)} MPa/s (a rigid frame would give "
        f"{figure(plan.rigid_stress_rate_mpa_s)} at this speed), force rate {figure(plan.force_rate_n_s)} N/s"
    )
    yield (
        f"crosshead {figure(plan.speed_mm_min)} mm/min, strain rate {plan.strain_rate_per_s:.3g} 1/s on a rigid frame; "
        f"{100 * plan.machine_share:.0f} % of the travel is the frame's"
    )
    own_n = plan.breaking_strength_n
    if own_n is not None:
        yield f"breaking strength F L/b {figure(own_n)} N at the mean"


def correction_lines(plan: Plan) -> Iterator[str]:
    """Beside the nominal stress, never in it."""
    fix = plan.corrections
    parts = []
    if fix.chamfer != 1.0:
        parts.append(f"chamfer {100 * (fix.chamfer - 1):+.1f} %")
    if fix.roller != 1.0:
        place = "0.375 h inboard of a load roller" if plan.spans.load_mm > 0 else "opposite the load roller"
        parts.append(f"{place} {100 * (fix.roller - 1):+.1f} %")
    if fix.own_weight_mpa:
        parts.append(f"own weight {fix.own_weight_mpa:+.2f} MPa")
    if fix.friction_share:
        parts.append(f"fixed rollers down to {-100 * fix.friction_share:.0f} %")
    parts.append(f"shear adds {100 * fix.shear_share:.1f} % to the bar's deflection")
    yield "beside the nominal stress: " + ", ".join(parts)


def advice_lines(plan: Plan, advice: Suggestion) -> Iterator[str]:
    yield (
        f"suggested cell: {advice.cell_n:g} N, or a larger one that is verified down to P1, "
        f"{figure(plan.at('P1').load_n)} N"
    )
    window = advice.speed_window_mm_min
    if advice.speed_mm_min is None and window is not None:
        yield (
            f"suggested speed: none; the windows of the card clash (not below {figure(window[0])}, "
            f"not above {figure(window[1])} mm/min)"
        )
    elif window is not None and advice.speed_mm_min is not None:
        kept = "as planned" if advice.speed_mm_min == plan.speed_mm_min else "in the middle of the window"
        yield (
            f"suggested speed: {figure(advice.speed_mm_min)} mm/min, {kept}; the card and the frame allow "
            f"{figure(window[0])} to {figure(window[1])} mm/min"
        )
    if advice.sample_rate_hz is None:
        yield f"suggested sampling: none mends this lag; the amplifier needs {figure(advice.bandwidth_hz)} Hz or more"
    else:
        yield (
            f"suggested sampling: {advice.sample_rate_hz:g} samples/s or more at this rate; "
            f"{figure(advice.raw_rate_hz)} where the highest raw sample is to be within 0.1 %"
        )
    yield "what bars buy (true m over estimated m, 95 %, maximum likelihood):"
    yield "  " + "   ".join(f"{row.bars}: {row.low:.2f} to {row.high:.2f}" for row in advice.bars)
    widths = "   ".join(f"{100 * width:.0f} %: {bars}" for width, bars in advice.widths)
    yield f"bars for a range of m no wider than   {widths}   of the estimate"


def order_lines(turns: Sequence[Turn], seed: int) -> Iterator[str]:
    """The firing order; the seed makes it again."""
    yield f"firing order, seed {seed}:"
    numbers = [turn.number for turn in turns]
    for start in range(0, len(numbers), ORDER_PER_LINE):
        yield "  " + " ".join(numbers[start : start + ORDER_PER_LINE])


def order_csv(turns: Sequence[Turn], seed: int) -> str:
    """place, number, batch and the seed that makes this order again."""
    rows = ["place,number,batch,seed"]
    for turn in turns:
        batch = (
            '"' + turn.batch.replace('"', '""') + '"' if any(c in turn.batch for c in ',"') else turn.batch
        )
        rows.append(f"{turn.place},{turn.number},{batch},{seed}")
    return "\n".join(rows) + "\n"


def plan_data(plan: Plan, found: Sequence[Finding], advice: Suggestion) -> dict[str, object]:
    """The plan as JSON data; a rigid frame and an unknown value are null."""
    method, bench = plan.method, plan.bench
    rigid = math.isinf(bench.stiffness_n_mm)
    return {
        "plan": PLAN_SCHEMA,
        "method": method.name,
        "standard": method.standard,
        "frame": bench.name or None,
        "fixture": bench.fixture or None,
        "support_span_mm": plan.spans.support_mm,
        "load_span_mm": plan.spans.load_mm,
        "span_per_thickness": plan.span_per_thickness,
        "expected": method.expected.model_dump(),
        "bar_stiffness_n_mm": plan.bar_n_mm,
        "frame_stiffness_n_mm": None if rigid else bench.stiffness_n_mm,
        "frame_stiffness_source": bench.stiffness_source,
        "speed_mm_min": plan.speed_mm_min,
        "force_rate_n_s": plan.force_rate_n_s,
        "stress_rate_mpa_s": plan.stress_rate_mpa_s,
        "rigid_stress_rate_mpa_s": plan.rigid_stress_rate_mpa_s,
        "strain_rate_per_s": plan.strain_rate_per_s,
        "machine_share": plan.machine_share,
        "breaking_strength_n": plan.breaking_strength_n,
        "breaks": [{name: getattr(row, name) for name in row.__slots__} for row in plan.breaks],
        "corrections": {name: getattr(plan.corrections, name) for name in plan.corrections.__slots__},
        "gates": [{"name": one.name, "gate": one.gate.value, "text": one.text} for one in found],
        "suggested": {
            "cell_n": advice.cell_n,
            "speed_mm_min": advice.speed_mm_min,
            "speed_window_mm_min": advice.speed_window_mm_min,
            "sample_rate_hz": advice.sample_rate_hz,
            "bandwidth_hz": advice.bandwidth_hz,
            "raw_rate_hz": advice.raw_rate_hz,
            "bars_for_width": [{"width": width, "bars": bars} for width, bars in advice.widths],
            "bars": [{"bars": row.bars, "m_low": row.low, "m_high": row.high} for row in advice.bars],
        },
    }


def figure(value: float) -> str:
    """Three or four significant digits without an exponent."""
    if value == 0 or not math.isfinite(value):
        return f"{value:g}"
    digits = max(
        0, (3 if abs(value) >= 1 else 2) - math.floor(math.log10(abs(value))) - (1 if abs(value) >= 1 else 0)
    )
    return f"{value:.{min(digits, 6)}f}"
