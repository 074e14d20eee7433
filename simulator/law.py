"""Force against crosshead travel for what stands in the fixture, and its inverse. Elastic; knows no time."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from daq.mechanics.quantity import Floats


@dataclass(frozen=True, slots=True)
class Law:
    """Machine, contact toe and bar as one spring.

    Over the toe the stiffness grows linearly from zero, so the force is k d^2/(2 toe), then k (d - toe/2).
    Softening: above `soft_from` of full_n the slope falls linearly and has lost `soft_share` at full_n.
    """

    stiffness_n_mm: float
    origin_mm: float  # crosshead position of first touch
    toe_mm: float = 0.0
    full_n: float = math.inf  # force that an unsoftened bar would have at its end
    soft_share: float = 0.0
    soft_from: float = 1.0

    def force(self, position_mm: Floats) -> Floats:
        """Force at crosshead positions."""
        travel = np.maximum(position_mm - self.origin_mm, 0.0)
        if self.toe_mm > 0:
            toe = travel < self.toe_mm
            straight = travel - self.toe_mm / 2
            travel = np.where(toe, travel * travel / (2 * self.toe_mm), straight)
        force_n: Floats = self.stiffness_n_mm * travel
        if self.soft_share > 0:
            over = np.maximum(force_n / self.full_n - self.soft_from, 0.0)
            force_n = force_n - self._bend * self.full_n * over**2
        return force_n

    def force_at(self, position_mm: float) -> float:
        return float(self.force(np.array([position_mm]))[0])

    def position(self, force_n: Floats) -> Floats:
        """Crosshead positions at forces above zero; the inverse of `force`."""
        if self.soft_share > 0:
            over = np.maximum(force_n / self.full_n - self.soft_from, 0.0)
            root = np.sqrt(np.maximum(1 - 4 * self._bend * over, 0.0))
            whole_n = self.full_n * (self.soft_from + (1 - root) / (2 * self._bend))
            force_n = np.where(over > 0, whole_n, force_n)
        straight = force_n / self.stiffness_n_mm + self.toe_mm / 2
        curved = np.sqrt(2 * self.toe_mm * np.maximum(force_n, 0.0) / self.stiffness_n_mm)
        travel = np.where(straight < self.toe_mm, curved, straight)
        return np.asarray(self.origin_mm + travel, dtype=np.float64)

    def position_at(self, force_n: float) -> float:
        return float(self.position(np.array([force_n]))[0])

    def slope_at(self, position_mm: float) -> float:
        """dF/dx, N/mm."""
        travel = position_mm - self.origin_mm
        if travel <= 0:
            return 0.0
        slope = self.stiffness_n_mm * (min(travel / self.toe_mm, 1.0) if self.toe_mm > 0 else 1.0)
        if self.soft_share == 0:
            return slope
        whole_n = replace(self, soft_share=0.0).force_at(position_mm)
        return slope * (1 - 2 * self._bend * max(whole_n / self.full_n - self.soft_from, 0.0))

    def slipped(self, position_mm: float, force_n: float) -> Law:
        """The same spring, shifted so that it carries this force here."""
        return replace(self, origin_mm=self.origin_mm + position_mm - self.position_at(force_n))

    def cracked(self, position_mm: float, force_n: float, stiffness_n_mm: float) -> Law:
        """A softer spring that carries this force here."""
        return replace(self, stiffness_n_mm=stiffness_n_mm).slipped(position_mm, force_n)

    @property
    def _bend(self) -> float:
        return self.soft_share / (2 * (1 - self.soft_from))


def in_series(*stiffness_n_mm: float) -> float:
    """Springs one after the other."""
    return 1 / sum(1 / k for k in stiffness_n_mm)


def full_force_n(break_n: float, soft_share: float, soft_from: float) -> float:
    """What an unsoftened bar would carry where a softened one breaks: F_full (1 - s(1-f0)/2) = F_break."""
    return break_n / (1 - soft_share * (1 - soft_from) / 2)
