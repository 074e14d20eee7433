"""One sensor and its converter: lag, noise, hum, drift, faults, rounding, rails. True values in, counts out.

Noise is a function of the sample's number; the rest of the state is the lag and the faults at work. Any cut
of a stream gives the same counts, and the last block may be taken back in part (`rewind`).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import accumulate

import numpy as np

from daq.cards.frame import Channel
from daq.mechanics.quantity import Floats
from simulator.card import ForceSensor, OtherSensor
from simulator.faults import AnyFault, Drift, Glitch, NoiseBurst, SensorFault, UnitSlip

NOISE_CHUNK = 4096  # samples drawn at once
SAMPLE_EDGE = 1e-9  # of a period: rounding of a sample that falls on an event


@dataclass(frozen=True, slots=True)
class _Active:
    fault: AnyFault
    from_s: float
    until_s: float


class Noise:
    """Standard normal numbers, a fixed one for every sample number."""

    def __init__(self, seed: tuple[int, ...]) -> None:
        self._seed = seed
        self._chunk = -1
        self._values = np.empty(0)

    def of(self, first: int, count: int) -> Floats:
        """Numbers of consecutive samples."""
        parts = [self._values[:0]]
        while count > 0:
            chunk, at = divmod(first, NOISE_CHUNK)
            if chunk != self._chunk:
                self._values = np.random.default_rng((*self._seed, chunk)).standard_normal(NOISE_CHUNK)
                self._chunk = chunk
            parts.append(self._values[at : at + count])
            first, count = first + parts[-1].size, count - parts[-1].size
        return parts[-1] if len(parts) == 2 else np.concatenate(parts)


class Sensor:
    """One channel's chain. `whole` channels give integer counts (binary integers); text may have more."""

    def __init__(
        self,
        channel: Channel,
        card: ForceSensor | OtherSensor,
        zero: float,
        period_s: float,
        *,
        whole: bool,
        seed: tuple[int, ...],
    ) -> None:
        self.name, self.role = channel.name, channel.role
        self._channel = channel
        self._card = card
        self._zero = zero
        self._period_s = period_s
        self._whole = whole
        self._noise = Noise((*seed, 0))
        self._burst = Noise((*seed, 1))  # a burst must not shift the rest of the noise
        self._lagged: tuple[float, float] | None = None  # last true value, last lagged value
        self._active: list[_Active] = []
        self._glitches: list[tuple[float, float, int]] = []  # from_s, size, samples left
        self._held: float | None = None
        self._last = 0.0
        self._before: tuple[tuple[float, float] | None, float] = (
            None,
            0.0,
        )  # lag and count before the last block
        self._block: tuple[Floats, Floats, Floats] = (np.empty(0), np.empty(0), np.empty(0))

    @property
    def steady(self) -> bool:
        """No fault at work: the last block may be taken back."""
        return not self._active and not self._glitches

    def begin(self, fault: AnyFault, now_s: float) -> None:
        """A fault of this channel begins with the first sample after now; one that falls on now is before it."""
        now_s += SAMPLE_EDGE * self._period_s
        if isinstance(fault, Glitch):
            self._glitches.append((now_s, fault.size, fault.samples))
            return
        until_s = math.inf if fault.for_s is None else now_s + fault.for_s
        self._active.append(_Active(fault, now_s, until_s))

    def clear(self) -> None:
        """All faults of this channel end."""
        self._active.clear()
        self._glitches.clear()

    def counts(self, first: int, times_s: Floats, true: Floats) -> Floats:
        """Counts of consecutive samples, the first one's number given."""
        card = self._card
        self._before = (self._lagged, self._last)
        lagged = self._lag(true)
        value = lagged + self._zero
        if card.drift_per_s:
            value = value + card.drift_per_s * times_s
        if card.hum:
            value = value + card.hum * np.sin(2 * math.pi * card.hum_hz * times_s)
        if card.noise:
            value = value + card.noise * self._noise.of(first, times_s.size)
        if self._active or self._glitches:
            value = self._before_converter(first, times_s, value)
        counts = self._convert(value)
        if self._active:
            counts = self._after_converter(times_s, counts)
        self._block = (true, lagged, counts)
        if counts.size:
            self._last = float(counts[-1])
        return counts

    def rewind(self, dropped: int) -> None:
        """The newest samples of the last block were never asked for."""
        true, lagged, counts = (part[: part.size - dropped] for part in self._block)
        self._lagged, self._last = self._before
        if counts.size:
            self._lagged = (float(true[-1]), float(lagged[-1])) if self._card.time_constant_s else None
            self._last = float(counts[-1])
        self._block = (true, lagged, counts)

    def _lag(self, true: Floats) -> Floats:
        """First-order lag, exact for a signal that is straight between samples."""
        tau_s = self._card.time_constant_s
        if tau_s == 0.0 or true.size == 0:
            return true
        step = self._period_s / tau_s
        keep = math.exp(-step)
        ramp = 1 - (1 - keep) / step
        old, lagged = self._lagged or (float(true[0]), float(true[0]))
        before = np.concatenate(((old,), true[:-1]))
        drive = before * (1 - keep - ramp) + true * ramp
        out = list(accumulate(drive.tolist(), lambda y, u: keep * y + u, initial=lagged))
        self._lagged = (float(true[-1]), out[-1])
        return np.array(out[1:])

    def _before_converter(self, first: int, times_s: Floats, value: Floats) -> Floats:
        value = value.copy()
        for active in self._active:
            inside = (times_s > active.from_s) & (times_s <= active.until_s)
            fault = active.fault
            if isinstance(fault, UnitSlip):
                value[inside] *= fault.factor
            elif isinstance(fault, Drift):
                value[inside] += fault.per_s * (times_s[inside] - active.from_s)
            elif isinstance(fault, NoiseBurst):
                value[inside] += fault.sigma * self._burst.of(first, times_s.size)[inside]
            elif isinstance(fault, SensorFault) and fault.kind == "wrong-polarity":
                value[inside] *= -1
        return self._glitched(times_s, value)

    def _glitched(self, times_s: Floats, value: Floats) -> Floats:
        left = []
        for from_s, size, samples in self._glitches:
            hit = np.flatnonzero(times_s > from_s)[:samples]
            value[hit] += size
            if hit.size < samples:
                left.append((from_s, size, samples - hit.size))
        self._glitches = left
        return value

    def _convert(self, value: Floats) -> Floats:
        channel, lsb = self._channel, self._card.lsb
        if lsb:
            value = np.rint(value / lsb) * lsb
        counts = (value * channel.sign - channel.offset) / channel.scale
        counts = np.rint(counts) if self._whole or not lsb else np.round(counts, 9)
        if channel.counts_min is not None or channel.counts_max is not None:
            counts = np.clip(counts, channel.counts_min, channel.counts_max)
        return counts

    def _after_converter(self, times_s: Floats, counts: Floats) -> Floats:
        for active in self._active:
            fault = active.fault
            if not isinstance(fault, SensorFault):
                continue
            inside = (times_s > active.from_s) & (times_s <= active.until_s)
            if fault.kind == "freeze":
                counts = self._frozen(inside, counts)
            elif fault.kind == "zeros":
                counts[inside] = 0.0
            elif fault.kind == "nan":
                counts[inside] = math.nan if not self._whole else self._channel.counts_min or 0.0
            elif fault.kind == "saturation" and self._channel.counts_max is not None:
                counts[inside] = self._channel.counts_max
        if times_s.size:
            now_s = float(times_s[-1])
            self._active = [active for active in self._active if active.until_s > now_s]
        return counts

    def _frozen(self, inside: np.ndarray[tuple[int], np.dtype[np.bool_]], counts: Floats) -> Floats:
        if not inside.any():
            return counts
        if self._held is None:
            first = int(np.argmax(inside))
            self._held = float(counts[first - 1]) if first else self._last
        counts[inside] = self._held
        if not inside[-1]:
            self._held = None
        return counts
