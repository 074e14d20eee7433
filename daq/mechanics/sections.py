"""Bars: cross-section and spans as values. Knows nothing of loads or materials, and accepts no impossible
size.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TypeAlias


@dataclass(frozen=True, slots=True)
class Rectangle:
    """b wide, h deep; the depth lies in the loading direction."""

    width_mm: float
    thickness_mm: float

    def __post_init__(self) -> None:
        assert self.width_mm > 0 and self.thickness_mm > 0

    @property
    def depth_mm(self) -> float:
        return self.thickness_mm

    @property
    def area_mm2(self) -> float:
        return self.width_mm * self.thickness_mm

    @property
    def second_moment_mm4(self) -> float:
        return self.width_mm * self.thickness_mm**3 / 12.0

    def shear_coefficient(self, poisson_ratio: float) -> float:
        """Timoshenko's kappa for shear deflection: 5/6 (energy method), whatever nu. Cowper:
        `cowper_rectangle`.
        """
        return 5.0 / 6.0


@dataclass(frozen=True, slots=True)
class Circle:
    """A rod."""

    diameter_mm: float

    def __post_init__(self) -> None:
        assert self.diameter_mm > 0

    @property
    def depth_mm(self) -> float:
        return self.diameter_mm

    @property
    def area_mm2(self) -> float:
        return math.pi * self.diameter_mm**2 / 4.0

    @property
    def second_moment_mm4(self) -> float:
        return math.pi * self.diameter_mm**4 / 64.0

    def shear_coefficient(self, poisson_ratio: float) -> float:
        """Cowper 1966, solid circle: 6(1+nu)/(7+6nu) (from memory)."""
        return 6.0 * (1.0 + poisson_ratio) / (7.0 + 6.0 * poisson_ratio)


@dataclass(frozen=True, slots=True)
class Tube:
    """D outside, d inside."""

    diameter_mm: float
    inner_diameter_mm: float

    def __post_init__(self) -> None:
        assert 0 <= self.inner_diameter_mm < self.diameter_mm

    @property
    def depth_mm(self) -> float:
        return self.diameter_mm

    @property
    def area_mm2(self) -> float:
        return math.pi * (self.diameter_mm**2 - self.inner_diameter_mm**2) / 4.0

    @property
    def second_moment_mm4(self) -> float:
        return math.pi * (self.diameter_mm**4 - self.inner_diameter_mm**4) / 64.0

    def shear_coefficient(self, poisson_ratio: float) -> float:
        """Cowper 1966, hollow circle, q = d/D (from memory): tends to the solid circle as q goes to 0."""
        nu = poisson_ratio
        q2 = (self.inner_diameter_mm / self.diameter_mm) ** 2
        bottom = (7.0 + 6.0 * nu) * (1.0 + q2) ** 2 + (20.0 + 12.0 * nu) * q2
        return 6.0 * (1.0 + nu) * (1.0 + q2) ** 2 / bottom


Section: TypeAlias = Rectangle | Circle | Tube


def section_modulus_mm3(section: Section) -> float:
    """W = I/(depth/2): bh^2/6, pi d^3/32, pi (D^4-d^4)/(32 D)."""
    return section.second_moment_mm4 / (section.depth_mm / 2.0)


def cowper_rectangle(poisson_ratio: float) -> float:
    """Cowper, J. Appl. Mech. 33 (1966): kappa = 10(1+nu)/(12+11nu) for a rectangle (existence confirmed
    publicly).
    """
    return 10.0 * (1.0 + poisson_ratio) / (12.0 + 11.0 * poisson_ratio)


@dataclass(frozen=True, slots=True)
class Spans:
    """Support span L and load span Li; Li = 0 is three-point."""

    support_mm: float
    load_mm: float = 0.0

    def __post_init__(self) -> None:
        assert 0 <= self.load_mm < self.support_mm

    @property
    def arm_mm(self) -> float:
        """a = (L - Li)/2."""
        return (self.support_mm - self.load_mm) / 2.0
