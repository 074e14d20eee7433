"""Made-up loadings with a known truth: a bar, a frame, a filter, noise - and the events a watch would have
emitted.

The break is a point in continuous time; the filter is the exact first-order answer, not a digital one.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from daq.cards.load import load_frame, load_method
from daq.stream.rundata import ChannelData, RunData

EXAMPLES = Path(__file__).resolve().parents[2] / "daq" / "cards" / "examples"
REST_S = 2.0


@dataclass
class Bar:
    """What is true. The force grows linearly after a quadratic toe and falls at time_to_break_s after
    contact.
    """

    peak_n: float = 460.0
    time_to_break_s: float = 16.0
    toe_s: float = 1.0
    rate_hz: float = 1000.0
    sigma_n: float = 0.15
    lag_s: float = 0.0  # of the real filter
    declared_lag_s: float | None = 0.0
    quantum_n: float = 0.0
    tare_n: float = 2.4
    modulus_gpa: float = 380.0
    ring_hz: float = 0.0
    residual: float = 0.0
    gradual: bool = False
    broken: bool = True
    zero_shift_n: float = 0.0
    fixture: str = "quarter-40-20"
    method: str = "alumina-bars"
    frame_changes: dict[str, Any] = field(default_factory=dict)
    method_changes: dict[str, Any] = field(default_factory=dict)
    extra_events: tuple[dict[str, Any], ...] = ()

    @property
    def slope_n_s(self) -> float:
        return self.peak_n / (self.time_to_break_s - self.toe_s / 2.0)

    def true_n(self, t: np.ndarray) -> np.ndarray:
        """Force before the break, t from contact."""
        toe = self.slope_n_s * np.clip(t, 0.0, None) ** 2 / (2.0 * self.toe_s) if self.toe_s else 0.0 * t
        line = self.slope_n_s * (t - self.toe_s / 2.0)
        up = np.where(t < self.toe_s, toe, line)
        if self.gradual:
            up = up - 0.15 * self.slope_n_s * np.clip(t - 0.7 * self.time_to_break_s, 0.0, None) ** 2 / (
                2.0 * 0.3 * self.time_to_break_s
            )
        return np.where(t < 0.0, 0.0, up)

    def top_n(self) -> float:
        return float(self.true_n(np.array([self.time_to_break_s]))[0]) if self.gradual else self.peak_n

    def load_n(self, t: np.ndarray) -> np.ndarray:
        """What the filter gives at times from contact."""
        break_s = self.time_to_break_s
        lag = self.lag_s
        before = self.true_n(t) if not lag else _lagged(t, self, lag)
        at_break = self.top_n() if not lag else float(_lagged(np.array([break_s]), self, lag)[0])
        after = np.clip(t - break_s, 0.0, None)
        fall = np.exp(-after / (0.08 if self.gradual else lag or 1e-9))
        if self.ring_hz:
            fall = np.exp(-0.03 * 2 * np.pi * self.ring_hz * after) * np.cos(2 * np.pi * self.ring_hz * after)
        gone = at_break * (self.residual + (1.0 - self.residual) * fall)
        return np.where((t <= break_s) | (not self.broken), before, gone)


def _lagged(t: np.ndarray, bar: Bar, lag: float) -> np.ndarray:
    """First-order answer to the quadratic toe and the line: exact, piece by piece."""
    r, toe = bar.slope_n_s, max(bar.toe_s, 1e-9)
    u = np.clip(t, 0.0, None)

    def in_toe(x):  # answer to r x^2/(2 toe)
        return r / toe * (x**2 / 2.0 - lag * x + lag**2 * (1.0 - np.exp(-x / lag)))

    v = np.clip(u - toe, 0.0, None)
    start = in_toe(np.array(toe))
    line = r * (v - lag) + r * toe / 2.0 + (start - r * toe / 2.0 + r * lag) * np.exp(-v / lag)
    return np.where(u < toe, in_toe(u), line)


def made_run(bar: Bar, rng: np.random.Generator) -> RunData:
    """Samples from REST_S before contact to 1 s after the break, with a random phase of the sampling."""
    period_s = 1.0 / bar.rate_hz
    end_s = bar.time_to_break_s + 1.0 if bar.broken else bar.time_to_break_s
    time_s = np.arange(-REST_S + rng.random() * period_s, end_s, period_s)
    net_n = bar.load_n(time_s)
    noise_n = bar.sigma_n * rng.standard_normal(time_s.size)
    shift_n = np.where(time_s > bar.time_to_break_s, bar.zero_shift_n, 0.0)
    value = net_n + bar.tare_n + noise_n + shift_n
    if bar.quantum_n:
        value = np.round(value / bar.quantum_n) * bar.quantum_n
    cards = made_cards(bar)
    frame_n_mm = 10e3
    section_mm4 = 4.0 * 3.0**3 / 12.0
    bar_n_mm = 12e3 * bar.modulus_gpa * section_mm4 / (10.0**2 * (3 * 40.0 - 4 * 10.0))
    speed_mm_s = bar.slope_n_s * (1 / bar_n_mm + 1 / frame_n_mm)
    travel_mm = speed_mm_s * np.clip(
        time_s, None, bar.time_to_break_s
    )  # the gap is approached at the same speed
    index = np.arange(5000, 5000 + time_s.size)
    clock = time_s + REST_S
    channels = {
        "force": ChannelData("force", "force", "N", index, clock, value / 0.016, value),
        "crosshead": ChannelData(
            "crosshead", "position", "mm", index, clock, travel_mm * 1e4, travel_mm + 7.0
        ),
    }
    return RunData(channels, tuple(_events(bar, time_s, value, index)), cards)


def made_cards(bar: Bar) -> dict[str, Any]:
    frame = load_frame(EXAMPLES / "kiln-lane-a.toml").model_dump(mode="json")
    method = load_method(EXAMPLES / f"{bar.method}.toml").model_dump(mode="json")
    frame["cell"] |= {"time_constant_s": bar.declared_lag_s, "noise_quiet_n": bar.sigma_n} | bar.frame_changes
    method |= bar.method_changes
    specimen = {"number": "A01", "width_mm": [4.0, 4.0, 4.0], "thickness_mm": [3.0, 3.0, 3.0]}
    run = {"run_id": "made", "series": "made", "specimen": "A01", "loading": 1, "fixture": bar.fixture}
    return {"frame": frame, "method": method, "specimen": specimen, "run": run}


def _events(bar: Bar, time_s: np.ndarray, value: np.ndarray, index: np.ndarray) -> list[dict[str, Any]]:
    """In the order and with the fields of the watch; the fracture is seen where a sample is first 2 %
    (6 sigma) low.
    """
    seated_s = bar.toe_s + min(1.0, 0.05 * bar.time_to_break_s)
    rows: list[tuple[float, str, dict[str, Any]]] = [
        (
            1.1,
            "tared",
            {"tare_n": bar.tare_n, "sigma_n": bar.sigma_n, "u_n": 0.01, "drift_n_min": 0.0, "samples": 1000},
        ),
        (1.5, "started", {}),
        (REST_S + 0.05, "approach_touch", {"force_n": bar.tare_n + 3.0}),
        (REST_S + seated_s, "seated", {"force_n": bar.tare_n + float(bar.true_n(np.array(seated_s)))}),
    ]
    if bar.broken:
        forecast_n = bar.load_n(np.clip(time_s, None, bar.time_to_break_s)) + bar.tare_n
        low = value < forecast_n - max(6.0 * bar.sigma_n, 0.02 * bar.top_n())
        first = int(np.flatnonzero(low & (time_s > bar.time_to_break_s))[0])
        at_s = REST_S + time_s
        fracture = {
            "verdict": "gradual failure" if bar.gradual else "sudden break",
            "last_good_index": int(index[first - 1]),
            "last_good_s": float(at_s[first - 1]),
            "first_dropped_s": float(at_s[first]),
            "sigma_n": bar.sigma_n,
        }
        rows.append((float(at_s[first]) + 0.11, "fracture", fracture))
        rows.append(
            (float(at_s[first]) + 0.4, "residual", {"force_n": bar.tare_n, "unloaded": not bar.residual})
        )
    rows += [
        (REST_S + float(event.pop("at_s")), event.pop("event"), event)
        for event in map(dict, bar.extra_events)
    ]
    verdict = "sudden break" if bar.broken else "stopped"
    rows.append(
        (REST_S + time_s[-1], "run_closed", {"verdict": verdict, "reason": "", "interrupted": not bar.broken})
    )
    rows.sort(key=lambda row: row[0])
    return [
        {"event": name, "time_s": at_s, "severity": "remark", "sequence": place, **fields}
        for place, (at_s, name, fields) in enumerate(rows)
    ]


def with_channel(run: RunData, name: str, **changes: np.ndarray) -> RunData:
    """The same run with other arrays in one channel; it is taken to be the only force channel where
    it is force.
    """
    old = run.channels[name]
    arrays = {key: getattr(old, key) for key in ("index", "time_s", "counts", "value")} | changes
    channel = ChannelData(old.name, old.role, old.unit, **arrays)
    return RunData({**run.channels, name: channel}, run.events, run.cards)


def with_force(run: RunData, **changes: np.ndarray) -> RunData:
    return with_channel(run, "force", **changes)
