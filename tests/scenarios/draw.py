"""From a seed to a plan: frame, wire, method, bar, misfortunes and what people do. Draws; plays and judges nothing.

Everything is drawn from the one seed, so a seed is the whole scenario. Most rates are low, because a sample costs the
same whether the scenario is slow or fast; bars break within seconds for the same reason.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from enum import Enum
from typing import Any

import numpy as np

from daq.cards.derived import compliance_for, fixture_by_name
from daq.cards.frame import FrameCard
from daq.cards.link import LinesDialect, Link
from daq.cards.method import MethodCard
from daq.cards.series import Specimen
from daq.watch.expected import Expected, expect
from simulator.card import SimulatorCard
from tests.scenarios.world import bar, bars_of, frame_of, method_of

RATES_HZ = (10.0, 20.0, 20.0, 25.0, 50.0, 50.0, 80.0, 100.0, 100.0, 125.0, 200.0, 200.0, 500.0, 1000.0)
SAMPLES_TO_BREAK_MIN = 65.0  # the usable envelope asks for 50
# mean strength; the size effect of m = 12 makes the shorter loaded length stronger
STRENGTH_MPA = {"quarter-40-20": 383.0, "three-40": 452.0}
HUM_HZ = 50.0
RING_DIES_HZ = 5.5  # frequency times damping: within the 0.1 s that the wrong-sign limit waits after a break


class Deed(Enum):
    """What a person does, or what happens to a process next to the bench."""

    STOP = "presses stop"
    NOTE = "notes something"
    CLOSE = "closes the run"
    EMERGENCY = "presses the emergency stop"
    SHIELD = "opens the shield"
    PANEL = "raises the crosshead from the machine's own panel"
    START = "asks for a start once more"
    JOG = "asks for a jog"
    RETURN = "asks for a return"
    RESET = "asks for a reset"
    TIGHTEN = "tightens the force limit"
    STALL = "nothing: the disk stalls"
    STATION = "nothing: the station falls silent"
    STOPPER = "nothing: the stopper process dies"


class Moment(Enum):
    """What an act waits for."""

    OPENED = "the run is open"
    READY = "ready"
    STARTED = "the start is given"
    TOUCHED = "the bar is touched"
    LOADING = "loading"
    ENDED = "the loading has ended"


@dataclass(frozen=True, slots=True)
class Act:
    """delay_s: after its moment. value: seconds of silence, mm, or share of the expected load."""

    deed: Deed
    moment: Moment
    delay_s: float
    value: float = 0.0


@dataclass(frozen=True, slots=True)
class Plan:
    """One scenario. kinds: the misfortunes and deeds in it, by name."""

    seed: int
    frame: FrameCard
    card: SimulatorCard
    method: MethodCard
    fixture: str
    specimen: Specimen
    expected: Expected
    to_break_s: float
    wake_s: float
    acts: tuple[Act, ...]
    again: bool

    @property
    def kinds(self) -> frozenset[str]:
        return frozenset([f.kind for f in self.card.faults] + [a.deed.name.lower() for a in self.acts])

    @property
    def rate_hz(self) -> float:
        return self.frame.links[0].rate_hz


@dataclass(frozen=True, slots=True)
class Scale:
    """What misfortunes are measured against."""

    load_n: float
    to_break_s: float
    rate_hz: float
    counted: bool  # the wire has a counter: lost rows can be seen
    two_links: bool


def draw(seed: int) -> Plan:
    """The plan of a seed."""
    rng = np.random.default_rng([20260115, seed])
    rate_hz = float(rng.choice(RATES_HZ))
    lane = str(rng.choice(["lines", "lines", "packets", "packets", "no counter", "two links"]))
    frame = _frame(rng, lane, rate_hz)
    fixture = "three-40" if lane in ("lines", "no counter") and rng.random() < 0.4 else "quarter-40-20"
    to_break_s = max(rng.uniform(2.5, 5.0), SAMPLES_TO_BREAK_MIN / rate_hz)
    specimen = bar("S-1")
    method, expected = _method(rng, frame, fixture, specimen, to_break_s)
    noise_n = expected.load_p50_n / 10 ** rng.uniform(2.2, 3.4)
    frame = frame.model_copy(update={"cell": frame.cell.model_copy(update={"noise_quiet_n": noise_n})})
    scale = Scale(expected.load_p50_n, to_break_s, rate_hz, lane != "no counter", lane == "two links")
    faults, acts = _misfortunes(rng, scale)
    parts = _machine(rng, expected, fixture, noise_n, rate_hz)
    return Plan(
        seed=seed,
        frame=frame,
        card=bars_of(faults=faults, seed=seed, **parts),
        method=method,
        fixture=fixture,
        specimen=specimen,
        expected=expected,
        to_break_s=to_break_s,
        wake_s=float(rng.choice([0.0, 0.0, 0.004, 0.01])),
        acts=acts,
        again=bool(rng.random() < 0.35),
    )


# --- frame and method


def _frame(rng: np.random.Generator, lane: str, rate_hz: float) -> FrameCard:
    latency_s = float(rng.uniform(0.02, 0.2))
    if lane in ("lines", "no counter"):
        frame = frame_of("kiln-lane-a.toml", rate_hz=rate_hz, stop_latency_s=latency_s)
        return _uncounted(frame) if lane == "no counter" else frame
    backoff = bool(rng.random() < 0.5)
    frame = frame_of("kiln-lane-b.toml", rate_hz=rate_hz, stop_latency_s=latency_s, backoff_auto=backoff)
    return _two_links(frame, float(rng.choice([0.5, 1.0, 2.0])) * rate_hz) if lane == "two links" else frame


def _uncounted(frame: FrameCard) -> FrameCard:
    """The same rows without a counter."""
    (link,) = frame.links
    assert link.lines is not None
    lines = link.lines.model_copy(update={"counter_column": None, "counter_modulus": None})
    channels = tuple(c.model_copy(update={"column": (c.column or 0) - 1}) for c in frame.channels)
    return frame.model_copy(
        update={"links": (link.model_copy(update={"lines": lines}),), "channels": channels}
    )


def _two_links(frame: FrameCard, rate_hz: float) -> FrameCard:
    """The position on a port of its own, at another rate."""
    lines = LinesDialect(
        separator=",", line_end="\r\n", prefix="P", counter_column=1, counter_modulus=256, checksum="xor8"
    )
    gauge = Link(
        name="gauge",
        kind="serial",
        port="gauge.tty",
        speed_baud=921600,
        rate_hz=rate_hz,
        dialect="lines",
        lines=lines,
    )
    moved = {"link": "gauge", "field": None, "column": 2, "scale": 1e-5}
    channels = tuple(c.model_copy(update=moved) if c.role == "position" else c for c in frame.channels)
    return frame.model_copy(update={"links": (*frame.links, gauge), "channels": channels})


def _method(
    rng: np.random.Generator, frame: FrameCard, fixture: str, specimen: Specimen, to_break_s: float
) -> tuple[MethodCard, Expected]:
    """A method that breaks the bar in that time, by crosshead speed or by a force loop of either side."""
    shape = {"geometry": "3-point", "load_span_mm": 0.0} if fixture == "three-40" else {}
    strength_mpa = STRENGTH_MPA[fixture]
    first = method_of(**shape)
    first = first.model_copy(
        update={"expected": first.expected.model_copy(update={"strength_mpa": strength_mpa})}
    )
    fitted, motion = fixture_by_name(frame, fixture), frame.motion
    assert motion is not None
    compliance = compliance_for(frame, fixture)
    rough = expect(first, specimen, fitted, compliance, motion.blocked_stiffness_n_mm)
    speed = round(60.0 * rough.load_p50_n / rough.stiffness_n_mm / to_break_s, 4)
    rate_n_s = rough.load_p50_n / to_break_s
    mode = str(rng.choice(["crosshead", "crosshead", "crosshead", "crosshead", "frame", "midspan"]))
    if mode == "crosshead":
        rate = first.rate.model_copy(update={"speed_mm_min": speed})
    elif mode == "frame":
        rate = first.rate.model_copy(update={"mode": "force", "speed_mm_min": None, "rate_n_s": rate_n_s})
    else:
        wanted = {
            "mode": "stress",
            "rate_mpa_s": strength_mpa / to_break_s,
            "loop": "midspan",
            "speed_mm_min": speed,
        }
        rate = first.rate.model_copy(update=wanted)
    hold_s = float(rng.choice([0.0, 0.0, 0.0, 0.6]))
    preload = first.preload.model_copy(update={"hold_s": hold_s})
    method = first.model_copy(update={"rate": rate, "preload": preload})
    return method, expect(method, specimen, fitted, compliance, motion.blocked_stiffness_n_mm)


# --- machine


def _machine(
    rng: np.random.Generator, expected: Expected, fixture: str, noise_n: float, rate_hz: float
) -> dict[str, Mapping[str, Any]]:
    """What is true of machine, wire and bar, where the frame card only believes."""
    hum_n = noise_n * float(rng.choice([0.0, 0.0, 0.5, 1.0]))
    if rate_hz <= HUM_HZ:
        hum_n = 0.0  # sampled at a part of its own frequency it is a slow wandering, which no tare can see
    ring_hz = float(rng.uniform(80.0, 500.0))
    dying = max(0.01, RING_DIES_HZ / ring_hz)
    after: dict[str, Any] = {"ring_hz": ring_hz, "ring_damping": float(rng.uniform(dying, 2.0 * dying))}
    if rng.random() < 0.3:
        after |= {
            "residual_percent": float(rng.uniform(2.0, 35.0)),
            "residual_s": float(rng.uniform(0.1, 3.0)),
        }
    if rng.random() < 0.12:
        after = {"kind": "gradual", "fall_s": float(rng.uniform(0.02, 0.1))}
    return {
        "contact": {"fixture": fixture, "toe_mm": float(rng.uniform(0.0, 0.01))},
        "drive": {
            "stiffness_n_mm": expected.stiffness_machine_n_mm,
            "stop_latency_s": float(rng.uniform(0.0, 0.15)),
        },
        "force": {"noise": noise_n, "hum": hum_n},
        "after_break": after,
        "electronics": {
            "clock_error_ppm": float(
                rng.choice([0.0, rng.uniform(-300.0, 300.0), rng.uniform(-3000.0, 3000.0)])
            ),
            "batch_s": float(rng.choice([0.0, 0.0, 0.001, 0.004, 0.016])),
            "counter_start": int(rng.choice([0, 65_400, rng.integers(0, 65_536)])),
        },
    }


# --- misfortunes


def _misfortunes(
    rng: np.random.Generator, scale: Scale
) -> tuple[tuple[Mapping[str, Any], ...], tuple[Act, ...]]:
    """None to three, of any mixture."""
    faults: list[Mapping[str, Any]] = []
    acts: list[Act] = []
    for _ in range(int(rng.choice([0, 1, 1, 1, 2, 2, 3]))):
        if rng.random() < 0.3:
            acts.append(_act(rng, scale))
        else:
            make = _FAULTS[int(rng.integers(len(_FAULTS)))]
            faults.append(make(rng, scale))
    return tuple(faults), tuple(acts)


def _act(rng: np.random.Generator, scale: Scale) -> Act:
    deed = list(Deed)[int(rng.integers(len(Deed)))]
    moment = list(Moment)[int(rng.integers(len(Moment)))]
    if deed in (Deed.STOP, Deed.EMERGENCY, Deed.SHIELD, Deed.PANEL, Deed.CLOSE) and rng.random() < 0.5:
        moment = Moment.LOADING
    longest = scale.to_break_s if moment is Moment.LOADING else 1.5
    value = {
        Deed.STALL: float(rng.choice([9.0, 44.0])),
        Deed.JOG: float(rng.uniform(-0.5, 0.5)),
        Deed.RETURN: float(rng.uniform(0.05, 0.5)),
        Deed.TIGHTEN: float(rng.uniform(0.3, 1.2)),
    }.get(deed, 0.0)
    return Act(deed, moment, float(rng.uniform(0.0, longest)), value)


def _when(rng: np.random.Generator, scale: Scale) -> dict[str, float]:
    """An anchor: mostly somewhere on the way up, now and then before it."""
    kind = rng.choice(["force", "force", "force", "contact", "contact", "start", "power"])
    if kind == "force":
        return {"at_force_n": float(rng.uniform(0.08, 1.0)) * scale.load_n}
    if kind == "contact":
        return {"after_contact_s": float(rng.uniform(0.0, 1.2 * scale.to_break_s))}
    if kind == "start":
        return {"after_start_s": float(rng.uniform(0.0, 2.0))}
    return {"at_s": float(rng.uniform(0.3, 4.0))}


def _lasting(rng: np.random.Generator) -> dict[str, float]:
    return {} if rng.random() < 0.5 else {"for_s": float(rng.uniform(0.02, 1.5))}


def _glitch(rng: np.random.Generator, scale: Scale) -> Mapping[str, Any]:
    size = float(rng.choice([-1.0, 1.0]) * rng.uniform(0.1, 0.8)) * scale.load_n
    return {"kind": "glitch", "size": size, "samples": int(rng.integers(1, 3)), **_when(rng, scale)}


def _slip(rng: np.random.Generator, scale: Scale) -> Mapping[str, Any]:
    return {"kind": "slip", "percent": float(rng.uniform(1.0, 14.0)), **_when(rng, scale)}


def _pop_in(rng: np.random.Generator, scale: Scale) -> Mapping[str, Any]:
    softer = float(rng.uniform(0.8, 0.97))
    drop = float(rng.uniform(2.0, 14.0))
    return {"kind": "pop-in", "percent": drop, "stiffness_factor": softer, **_when(rng, scale)}


def _sensor(rng: np.random.Generator, scale: Scale) -> Mapping[str, Any]:
    kind = str(rng.choice(["freeze", "zeros", "nan", "saturation", "wrong-polarity"]))
    channel = "force" if rng.random() < 0.75 else "position"
    return {"kind": kind, "channel": channel, **_when(rng, scale), **_lasting(rng)}


def _unit_slip(rng: np.random.Generator, scale: Scale) -> Mapping[str, Any]:
    factor = float(rng.choice([0.001, 0.101972, 0.224809, 9.80665]))
    return {"kind": "unit-slip", "factor": factor, **_when(rng, scale)}


def _drift(rng: np.random.Generator, scale: Scale) -> Mapping[str, Any]:
    per_s = float(rng.uniform(-0.05, 0.05)) * scale.load_n / scale.to_break_s
    return {"kind": "drift", "per_s": per_s, **_when(rng, scale), **_lasting(rng)}


def _noise(rng: np.random.Generator, scale: Scale) -> Mapping[str, Any]:
    return {
        "kind": "noise",
        "sigma": float(rng.uniform(0.001, 0.004)) * scale.load_n,
        **_when(rng, scale),
        **_lasting(rng),
    }


def _rows(rng: np.random.Generator, scale: Scale) -> Mapping[str, Any]:
    if not scale.counted:
        return _glitch(rng, scale)
    kind = str(rng.choice(["dropped", "duplicated"]))
    return {"kind": kind, "rows": int(rng.choice([1, 2, 5, 6, 20])), "link": "main", **_when(rng, scale)}


def _wire(rng: np.random.Generator, scale: Scale) -> Mapping[str, Any]:
    kind = str(rng.choice(["stream-end", "garbage", "reconnect"]))
    link = "gauge" if scale.two_links and rng.random() < 0.4 else "main"
    lasting = {"for_s": float(rng.uniform(0.05, 2.0))} if kind == "reconnect" else _lasting(rng)
    return {"kind": kind, "link": link, **_when(rng, scale), **lasting}


def _controller(rng: np.random.Generator, scale: Scale) -> Mapping[str, Any]:
    kinds = ["deaf", "stop-ignored", "mute", "drive-fault", "shield-open", "emergency-stop"]
    return {"kind": str(rng.choice(kinds)), **_when(rng, scale), **_lasting(rng)}


def _speed_slip(rng: np.random.Generator, scale: Scale) -> Mapping[str, Any]:
    factor = float(rng.choice([0.3, 2.0, 5.0, 60.0]))
    return {"kind": "speed-slip", "factor": factor, **_when(rng, scale)}


def _fixturing(rng: np.random.Generator, scale: Scale) -> Mapping[str, Any]:
    kind = str(rng.choice(["no-specimen", "blocked"]))
    return {"kind": kind, "after_start_s": float(rng.uniform(0.0, 0.5))}


def _halves(rng: np.random.Generator, scale: Scale) -> Mapping[str, Any]:
    return {"kind": "halves-left", "force_n": float(rng.uniform(0.5, 5.0)), **_when(rng, scale)}


_FAULTS: tuple[Callable[[np.random.Generator, Scale], Mapping[str, Any]], ...] = (
    _glitch,
    _glitch,
    _slip,
    _pop_in,
    _sensor,
    _sensor,
    _sensor,
    _unit_slip,
    _drift,
    _noise,
    _rows,
    _rows,
    _wire,
    _wire,
    _controller,
    _controller,
    _speed_slip,
    _fixturing,
    _halves,
)
