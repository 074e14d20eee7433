"""Load records for the fracture watch: seeded, stratified, pure numpy; each with the truth about what happens in it.

A record is what the cell of a frame would give through one loading, whatever is commanded: rest, touch, toe, ramp
with disturbances, break (or the loss of the signal), and what is left. Nothing in here knows how breaks are found.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from math import pi

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]
CAPACITY_N = 1000.0
TOUCH_PLATEAU_N = 8.0


@dataclass(frozen=True)
class Case:
    """One bar of one stratum."""

    seed: int
    stratum: str
    rate_hz: float
    peak_n: float
    sigma_n: float
    ramp_s: float
    toe_s: float = 0.3
    slips: tuple[tuple[float, float], ...] = ()  # (at this share of the peak, drop as share of the load)
    pop_ins: tuple[tuple[float, float, float], ...] = ()  # (at, drop, slope factor after)
    glitches: tuple[tuple[float, float, int], ...] = ()  # (at, amplitude N, samples)
    ring_hz: float = 0.0
    ring_zeta: float = 0.03
    residual: float = 0.0
    residual_s: float = 10.0
    fall_tau_s: float = 0.0
    softening: float = 0.0
    hum_hz: float = 0.0
    hum_n: float = 0.0
    lag_s: float = 0.0
    lag_declared: bool = True
    step_n: float = 0.016
    end: str = "break"  # break, frozen, zero, nan, rail


@dataclass
class Record:
    case: Case
    times_s: Floats
    counts: Floats
    start_s: float  # when the start may be given
    break_s: float  # onset of the break, or of the loss
    break_n: float
    drops: list[float] = field(default_factory=list)


def make(case: Case) -> Record:
    """The record of a case: the same for the same seed."""
    rng = np.random.default_rng(case.seed)
    period = 1.0 / case.rate_hz
    rest_s = max(1.3, 45.0 * period) + 0.2
    plateau_s = 0.17 + 4.0 * period  # touch seen by two bins, stop latency
    fine = max(case.rate_hz, 2000.0) if case.lag_s or case.ring_hz else case.rate_hz
    factor = max(1, round(fine / case.rate_hz))
    fine = case.rate_hz * factor
    ramp, drops = _ramp(case, fine)
    after_s = max(3.0, 30.0 * period)
    pieces = [
        np.zeros(round(rest_s * fine)),
        np.full(round(plateau_s * fine), TOUCH_PLATEAU_N),
        TOUCH_PLATEAU_N + ramp,
    ]
    onset = sum(len(piece) for piece in pieces)
    top = pieces[-1][-1]
    pieces.append(_after(case, top, fine, after_s, rng))
    force = np.concatenate(pieces)
    if case.lag_s:
        force = _lag(force, case.lag_s, fine)
    offset = int(rng.integers(factor))
    force = force[offset::factor]
    times = (np.arange(len(force)) + 1) * period
    onset_s = (onset - offset) / fine + period
    force = force + _hum(case, times, rng) + case.sigma_n * rng.standard_normal(len(force))
    counts = np.round(force / case.step_n)
    first = (len(pieces[0]) + len(pieces[1]) - offset) / factor
    counts = _glitch(case, counts, ramp[::factor] + TOUCH_PLATEAU_N, round(first))
    counts = _lose(case, counts, times, onset_s)
    return Record(case, times, counts, rest_s - 0.1, onset_s, float(top), drops)


def _ramp(case: Case, fine: float) -> tuple[Floats, list[float]]:
    """Toe and ramp up to the break, above the touch plateau, with its partial drops."""
    slope = case.peak_n / case.ramp_s
    events = sorted(
        [(at, drop, 1.0) for at, drop in case.slips] + [(at, drop, keep) for at, drop, keep in case.pop_ins]
    )
    toe = max(1, round(case.toe_s * fine))
    start = np.cumsum(np.linspace(0.3, 1.0, toe) * slope / fine)
    parts, level, drops = [start], float(start[-1]), []
    for at, drop, keep in events:
        parts.append(_rise(level, at * case.peak_n, slope, fine, 0.0))
        level = at * case.peak_n * (1.0 - drop)
        drops.append(drop * at * case.peak_n)
        slope *= keep
        parts.append(np.array([level]))
    parts.append(_rise(level, case.peak_n - TOUCH_PLATEAU_N, slope, fine, case.softening))
    return np.concatenate(parts), drops


def _rise(start: float, end: float, slope: float, fine: float, softening: float) -> Floats:
    count = max(1, round((end - start) / slope * fine))
    share = np.arange(1, count + 1) / count
    bent = share - softening * share**2 / 2
    return start + (end - start) * bent / bent[-1]


def _after(case: Case, top: float, fine: float, after_s: float, rng: np.random.Generator) -> Floats:
    t = np.arange(round(after_s * fine)) / fine
    if case.end in ("frozen", "zero", "nan", "rail"):
        return top + case.peak_n / case.ramp_s * t
    left = np.where(t < case.residual_s, case.residual * top, 0.0)
    if case.fall_tau_s:
        return left + (top - left) * np.exp(-t / case.fall_tau_s)
    if case.ring_hz:
        phase = rng.uniform(0, 0.3)
        decay = np.exp(-case.ring_zeta * 2 * pi * case.ring_hz * t)
        return left + (top - left) * decay * np.cos(2 * pi * case.ring_hz * t + phase) * (t > 0)
    return left


def _lag(force: Floats, lag_s: float, fine: float) -> Floats:
    """First-order lag, exact for steps; by scan because numpy has no filter."""
    keep = np.exp(-1.0 / (lag_s * fine))
    out = np.empty_like(force)
    level = force[0]
    for place, value in enumerate(force.tolist()):
        level = keep * level + (1.0 - keep) * value
        out[place] = level
    return out


def _hum(case: Case, times: Floats, rng: np.random.Generator) -> Floats:
    return case.hum_n * np.sin(2 * pi * case.hum_hz * times + rng.uniform(0, 2 * pi))


def _glitch(case: Case, counts: Floats, load: Floats, first: int) -> Floats:
    counts = counts.copy()
    for at, amplitude, samples in case.glitches:
        place = first + int(np.searchsorted(load, at * case.peak_n))
        counts[place : place + samples] += np.round(amplitude / case.step_n)
    return counts


def _lose(case: Case, counts: Floats, times: Floats, onset_s: float) -> Floats:
    lost = times >= onset_s
    if case.end == "frozen":
        counts[lost] = counts[np.flatnonzero(lost)[0] - 1]
    elif case.end == "zero":
        counts[lost] = 0.0
    elif case.end == "nan":
        counts[lost] = np.nan
    elif case.end == "rail":
        counts[lost] = 120_000.0
    return counts


# --- strata

RATES_HZ = (10.0, 50.0, 100.0, 200.0, 1000.0, 2000.0, 10_000.0)
STRATA = (
    "clean",
    "slip",
    "pop-in",
    "glitch",
    "ringing",
    "residual",
    "gradual",
    "hum",
    "slow filter",
    "hard toe",
    "combined",
    "frozen",
    "zero",
    "nan",
    "rail",
)


def draw(seed: int, stratum: str, rate_hz: float, *, brief: bool = False) -> Case:
    """A case of that stratum at that rate, inside the usable envelope (daq.watch.envelope). brief: short ramps."""
    rng = np.random.default_rng([seed, STRATA.index(stratum), round(rate_hz)])
    peak = rng.uniform(280.0, 560.0)
    shortest = max(2.5, 60.0 / rate_hz) if brief or rate_hz > 5000 else max(5.0, 60.0 / rate_hz)
    ramp_s = rng.uniform(shortest, 2.0 * shortest if brief or rate_hz > 5000 else 16.0)
    sigma = peak / 10 ** rng.uniform(2.0, 3.5)
    case = {
        "seed": int(rng.integers(2**31)),
        "stratum": stratum,
        "rate_hz": rate_hz,
        "peak_n": peak,
        "sigma_n": sigma,
        "ramp_s": ramp_s,
        "toe_s": rng.uniform(0.05, 1.0),
    }
    kinds = [stratum]
    if stratum == "combined":
        kinds = list(rng.choice(["slip", "pop-in", "glitch", "ringing", "residual", "hum"], 3, replace=False))
    for kind in kinds:
        case |= _disturb(kind, rng, case)
    return Case(**_spread(case))  # type: ignore[arg-type]


def _spread(case: dict[str, object]) -> dict[str, object]:
    """Drops nearer to each other than an eighth of the way up are a crushing bar: that is a stop, and rightly so."""
    taken = [at for at, *_ in case.get("pop_ins", ())]  # type: ignore[attr-defined]
    slips = []
    for slip in case.get("slips", ()):  # type: ignore[attr-defined]
        if all(abs(slip[0] - at) >= 0.125 for at in taken):
            slips.append(slip)
            taken.append(slip[0])
    return {**case, "slips": tuple(slips)} if "slips" in case else case


def _disturb(kind: str, rng: np.random.Generator, case: dict[str, object]) -> dict[str, object]:
    peak, rate_hz, sigma = float(case["peak_n"]), float(case["rate_hz"]), float(case["sigma_n"])  # type: ignore[arg-type]
    if kind == "slip":
        places = np.sort(rng.uniform(0.4, 0.9, rng.integers(1, 3)))
        return {"slips": tuple((float(at), float(rng.uniform(0.01, 0.15))) for at in places)}
    if kind == "pop-in":
        keep = float(rng.uniform(0.6, 0.95))
        return {"pop_ins": ((float(rng.uniform(0.4, 0.85)), float(rng.uniform(0.03, 0.17)), keep),)}
    if kind == "glitch":
        found = []
        apart = max(10.0 / rate_hz, 0.08) / float(case["ramp_s"])  # type: ignore[arg-type]  # else one long dropout
        places = np.sort(rng.uniform(0.05, 0.93, rng.integers(1, 4)))
        for at in places[np.diff(places, prepend=-1.0) > apart]:
            samples = int(rng.integers(1, 3))
            load = at * peak
            # two samples above the specimen's ceiling are a limit passed, not a glitch
            high = 400.0 if samples == 1 else max(min(400.0, 560.0 - load - 8 * sigma), 12 * sigma)
            size = high if rng.random() < 0.5 else -rng.uniform(0.3, 1.0) * min(450.0, load + 20.0)
            found.append((float(at), float(size), samples))
        return {"glitches": tuple(found)}
    if kind == "ringing":
        return {"ring_hz": float(10 ** rng.uniform(1.65, 2.9)), "ring_zeta": float(rng.uniform(0.01, 0.06))}
    if kind == "residual":
        return {"residual": float(rng.uniform(0.05, 0.42)), "residual_s": float(rng.uniform(0.1, 2.0))}
    if kind == "gradual":
        return {"fall_tau_s": float(10 ** rng.uniform(-1.7, 0.3)), "softening": float(rng.uniform(0.0, 0.8))}
    if kind == "hum":
        return {
            "hum_hz": float(rng.choice([50.0, 60.0])),
            "hum_n": float(rng.uniform(0.5, 4.0)) * peak / 480.0,
        }
    if kind == "slow filter":
        lag = float(10 ** rng.uniform(-2.5, -1.1)) * min(1.0, float(case["ramp_s"]) / 5.0)  # type: ignore[arg-type]
        return {"lag_s": lag, "lag_declared": bool(rng.random() < 0.5)}
    if kind == "hard toe":
        return {"toe_s": 0.0}
    if kind in ("frozen", "zero", "nan", "rail"):
        return {"end": kind, "sigma_n": min(sigma, peak / 300.0)}
    assert kind == "clean" and rate_hz > 0
    return {}
