"""Rows of one link: when it samples, what each channel truly is, and what the sensors make of it. Pure."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from daq.cards.frame import Channel, FrameCard
from daq.mechanics.quantity import Floats
from simulator.card import ForceSensor, OtherSensor, SimulatorCard
from simulator.grip import Grip
from simulator.sensors import SAMPLE_EDGE, Sensor


@dataclass(frozen=True, slots=True, eq=False)
class SampleRows:
    """Consecutive rows of one link. counts: (n, k) in the card's channel order; inputs: bit i = INPUTS[i]."""

    link: int
    first_counter: int
    time_s: Floats
    counts: Floats
    inputs: npt.NDArray[np.int64]

    @property
    def count(self) -> int:
        return len(self.time_s)


@dataclass(frozen=True, slots=True, eq=False)
class Moment:
    """The true state of the machine over a stretch without events."""

    grip: Grip
    resting_n: float  # weight left on the fixture, as far as the cell sees it
    inputs: int


class LinkSampler:
    """Samples on its own clock, which may be off by some ppm."""

    def __init__(self, frame: FrameCard, card: SimulatorCard, link_number: int) -> None:
        link = frame.links[link_number]
        self.link_number = link_number
        self._channels = [channel for channel in frame.channels if channel.link == link.name]
        self._position_sign = frame.motion.position_sign if frame.motion is not None else 1
        self._period_s = 1 / (link.rate_hz * (1 + card.electronics.clock_error_ppm * 1e-6))
        self._counter_start = card.electronics.counter_start
        self._next = 0
        self._times: list[Floats] = []
        self._true: list[list[Floats]] = []
        self._inputs: list[npt.NDArray[np.int64]] = []
        self.sensors = [
            _sensor(frame, card, channel, self._period_s, (card.seed, link_number, number))
            for number, channel in enumerate(self._channels)
        ]

    def due(self, until_s: float) -> Floats:
        """Sample times up to and including this moment; they count as taken."""
        end = math.floor(until_s / self._period_s + SAMPLE_EDGE) + 1
        times_s = np.arange(self._next, end, dtype=np.float64) * self._period_s
        self._next = max(self._next, end)
        return times_s

    @property
    def steady(self) -> bool:
        """No sensor fault at work."""
        return all(sensor.steady for sensor in self.sensors)

    def rewind(self, to_s: float) -> int:
        """Samples of the last block after this moment were never asked for; their number."""
        assert not self._times
        kept = math.floor(to_s / self._period_s + SAMPLE_EDGE) + 1
        dropped = max(self._next - kept, 0)
        if dropped:
            for sensor in self.sensors:
                sensor.rewind(dropped)
            self._next = kept
        return dropped

    def next_s(self) -> float:
        """Time of the next sample."""
        return self._next * self._period_s

    def note(self, times_s: Floats, position_mm: Floats, moment: Moment) -> None:
        """Keep what is true at these times."""
        force_n = moment.grip.force(times_s, position_mm)
        self._times.append(times_s)
        self._true.append([self._truth(c, times_s, position_mm, force_n, moment) for c in self._channels])
        self._inputs.append(np.full(times_s.size, moment.inputs, dtype=np.int64))

    def take(self) -> SampleRows | None:
        """Rows since the last call, through the sensors."""
        if not self._times:
            return None
        times_s = np.concatenate(self._times)
        counts = np.empty((times_s.size, len(self.sensors)))
        first = self._next - times_s.size
        for column, sensor in enumerate(self.sensors):
            true = np.concatenate([piece[column] for piece in self._true])
            counts[:, column] = sensor.counts(first, times_s, true)
        inputs = np.concatenate(self._inputs)
        rows = SampleRows(self.link_number, self._counter_start + first, times_s, counts, inputs)
        self._times, self._true, self._inputs = [], [], []
        return rows

    def _truth(
        self, channel: Channel, times_s: Floats, position_mm: Floats, force_n: Floats, moment: Moment
    ) -> Floats:
        bar = moment.grip.bar
        if channel.role == "force":
            return force_n + moment.resting_n
        if channel.role == "position":
            return self._position_sign * position_mm
        if bar is not None and channel.role == "deflection":
            return moment.grip.on_bar(times_s, position_mm) * bar.mid_per_n
        if bar is not None and channel.role == "strain":
            return moment.grip.on_bar(times_s, position_mm) * (bar.stress_per_n / bar.modulus_mpa)
        return np.zeros_like(times_s)


def _sensor(
    frame: FrameCard, card: SimulatorCard, channel: Channel, period_s: float, seed: tuple[int, ...]
) -> Sensor:
    parts: dict[str, ForceSensor | OtherSensor] = {
        "force": card.force,
        "position": card.position,
        "deflection": card.deflection,
        "strain": card.strain,
        "temperature": card.temperature,
        "humidity": card.humidity,
    }
    part = parts.get(channel.role, OtherSensor())
    zero = part.zero if part.zero is not None else frame.cell.zero_balance_n
    return Sensor(channel, part, zero, period_s, whole=_is_whole(frame, channel), seed=seed)


def _is_whole(frame: FrameCard, channel: Channel) -> bool:
    """Binary integers cannot carry fractions; text can."""
    link = next(link for link in frame.links if link.name == channel.link)
    if link.packets is None:
        return False
    number = next((f.number for f in link.packets.fields if f.name == channel.field), "int32")
    return "float" not in number
