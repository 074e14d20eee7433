"""What stands between the rollers and how it lets go: whole, slipped, cracked, broken, blocked or nothing.

Gives the true force on the load train at any position and time. Knows the bar, not the drive; draws nothing.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from daq.mechanics.quantity import Floats
from simulator.card import AfterBreak, SimulatorCard
from simulator.faults import PopIn
from simulator.law import Law, full_force_n, in_series
from simulator.specimen import Bar

RING_LEFT = 1e-4  # of the break force: a ringing below this is over


@dataclass(frozen=True, slots=True)
class Parting:
    """The bar has let go at this time from this force."""

    at_s: float
    from_n: float
    how: AfterBreak

    def carried(self, times_s: Floats) -> Floats:
        """What the pieces could still carry."""
        after_s = times_s - self.at_s
        residual_n = self.from_n * self.how.residual_percent / 100
        rest = np.where(after_s < self.how.residual_s, residual_n, 0.0)
        if self.how.kind == "gradual":
            rest = rest + (self.from_n - residual_n) * np.exp(-after_s / self.how.fall_s)
        return rest

    def ringing(self, times_s: Floats) -> Floats:
        """The load train swings about what is left, down to minus the lost force (first principles)."""
        if self.how.kind == "gradual" or self.how.ring_hz == 0.0:
            return np.zeros_like(times_s)
        after_s = times_s - self.at_s
        natural = 2 * math.pi * self.how.ring_hz
        damped = natural * math.sqrt(1 - self.how.ring_damping**2)
        decay = np.exp(-self.how.ring_damping * natural * after_s)
        lost_n = self.from_n * (1 - self.how.residual_percent / 100)
        return np.asarray(np.where(decay > RING_LEFT, lost_n * decay * np.cos(damped * after_s), 0.0))

    @property
    def quiet_s(self) -> float:
        """From here on nothing changes any more."""
        ring_s = -math.log(RING_LEFT) / (self.how.ring_damping * 2 * math.pi * (self.how.ring_hz or math.inf))
        fall_s = self.how.fall_s * 40 if self.how.kind == "gradual" else 0.0
        return self.at_s + max(ring_s, fall_s, self.how.residual_s)


class Grip:
    """One filling of the fixture. Times and positions are arguments."""

    def __init__(self, card: SimulatorCard, bar: Bar | None, contact_mm: float, anvil_mm: float) -> None:
        self._card = card
        self.bar = bar
        self._anvil = Law(card.drive.stiffness_n_mm, anvil_mm)
        self._bar_n_mm = bar.stiffness_n_mm if bar is not None else 0.0
        self.parting: Parting | None = None
        self.law: Law | None = None
        self.break_n = math.inf
        if bar is not None:
            self.break_n = bar.break_n
            self.law = self._whole(bar, contact_mm)

    def _whole(self, bar: Bar, contact_mm: float) -> Law:
        soft = self._card.after_break
        stiffness_n_mm = in_series(self._card.drive.stiffness_n_mm, bar.stiffness_n_mm)
        law = Law(stiffness_n_mm, contact_mm, self._card.contact.toe_mm)
        if soft.softening_percent == 0.0 or math.isinf(bar.break_n):
            return law
        share, begin = soft.softening_percent / 100, soft.softening_from_percent / 100
        full_n = full_force_n(bar.break_n, share, begin)
        return Law(stiffness_n_mm, contact_mm, self._card.contact.toe_mm, full_n, share, begin)

    @classmethod
    def blocked(cls, card: SimulatorCard, contact_mm: float, stiffness_n_mm: float) -> Grip:
        """Something stiff that never breaks."""
        grip = cls(card, None, contact_mm, math.inf)
        grip.law = Law(stiffness_n_mm, contact_mm)
        return grip

    @property
    def touch_mm(self) -> float:
        """Position of first touch of something whole."""
        return self.law.origin_mm if self.law is not None and self.parting is None else math.inf

    def force(self, times_s: Floats, position_mm: Floats) -> Floats:
        """True force on the load train, N."""
        if self.law is None:
            force_n = np.zeros_like(position_mm)
        elif self.parting is None:
            force_n = self.law.force(position_mm)
        elif times_s.size and times_s[0] > self.parting.quiet_s:
            force_n = np.zeros_like(position_mm)
        else:
            carried = np.minimum(self.law.force(position_mm), self.parting.carried(times_s))
            force_n = carried + self.parting.ringing(times_s)
        if position_mm.size and float(position_mm.max()) > self._anvil.origin_mm:
            force_n = force_n + self._anvil.force(position_mm)
        return force_n

    def on_bar(self, times_s: Floats, position_mm: Floats) -> Floats:
        """Static force through the bar: what bends it. Nothing once it has parted."""
        if self.bar is None or self.law is None or self.parting is not None:
            return np.zeros_like(position_mm)
        return self.law.force(position_mm)

    def part(self, now_s: float, force_n: float) -> None:
        """The bar lets go."""
        self.parting = Parting(now_s, force_n, self._card.after_break)

    def slip(self, position_mm: float, percent: float) -> None:
        """Shift: the force here drops by a share."""
        if self.law is not None:
            left_n = self.law.force_at(position_mm) * (1 - percent / 100)
            self.law = self.law.slipped(position_mm, left_n)

    def crack(self, position_mm: float, fault: PopIn) -> None:
        """An arrested crack: the force here drops and the bar is softer."""
        if self.law is None or self.bar is None:
            return
        left_n = self.law.force_at(position_mm) * (1 - fault.percent / 100)
        self._bar_n_mm *= fault.stiffness_factor
        whole = in_series(self._card.drive.stiffness_n_mm, self._bar_n_mm)
        self.law = self.law.cracked(position_mm, left_n, whole)
        self.break_n = self.break_n if fault.breaks_at_n is None else fault.breaks_at_n
