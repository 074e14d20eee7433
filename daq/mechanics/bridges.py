"""Gauge bridges: output ratio r = Vo/Vex for strain and back, exact circuit solutions, and the shunt check.

x = GF eps throughout (checked against the solved circuit). Bending half and full bridges cancel axial strain
to first order only.
"""

from __future__ import annotations

from enum import Enum

from daq.mechanics.quantity import Quantity


class Bridge(Enum):
    """Which arms are gauges."""

    QUARTER = "quarter"
    HALF_BENDING = "half, top and bottom"
    HALF_POISSON = "half, along and across"
    FULL_BENDING = "full, two top and two bottom"
    FULL_BENDING_POISSON = "full, bending with gauges across"
    FULL_AXIAL_POISSON = "full, axial with gauges across"


def output_ratio(
    bridge: Bridge, strain: Quantity, gauge_factor: float, poisson_ratio: float = 0.0
) -> Quantity:
    """Vo/Vex at this strain."""
    x, nu = strain * gauge_factor, poisson_ratio
    match bridge:
        case Bridge.QUARTER:
            return x / (4.0 + 2.0 * x)
        case Bridge.HALF_BENDING:
            return x / 2.0
        case Bridge.HALF_POISSON:
            return x * (1.0 + nu) / (4.0 + 2.0 * x * (1.0 - nu))
        case Bridge.FULL_BENDING:
            return x * 1.0
        case Bridge.FULL_BENDING_POISSON:
            return x * (1.0 + nu) / 2.0
        case Bridge.FULL_AXIAL_POISSON:
            return x * (1.0 + nu) / (2.0 + x * (1.0 - nu))


def strain_from_ratio(
    bridge: Bridge, ratio: Quantity, gauge_factor: float, poisson_ratio: float = 0.0
) -> Quantity:
    """The exact inverse of `output_ratio`; quarter bridge: 4r/(GF(1-2r))."""
    r, nu = ratio, poisson_ratio
    match bridge:
        case Bridge.QUARTER:
            return 4.0 * r / (1.0 - 2.0 * r) / gauge_factor
        case Bridge.HALF_BENDING:
            return 2.0 * r / gauge_factor
        case Bridge.HALF_POISSON:
            return 4.0 * r / (1.0 + nu - 2.0 * r * (1.0 - nu)) / gauge_factor
        case Bridge.FULL_BENDING:
            return r / gauge_factor
        case Bridge.FULL_BENDING_POISSON:
            return 2.0 * r / (1.0 + nu) / gauge_factor
        case Bridge.FULL_AXIAL_POISSON:
            return 2.0 * r / (1.0 + nu - r * (1.0 - nu)) / gauge_factor


def apparent_quarter_strain(ratio: Quantity, gauge_factor: float) -> Quantity:
    """What a linear amplifier shows for a quarter bridge: 4r/GF."""
    return 4.0 * ratio / gauge_factor


def shunt_resistance_ohm(gauge_ohm: float, gauge_factor: float, strain: float) -> float:
    """Resistor across a gauge that simulates this compressive strain: Rg/(GF eps) - Rg."""
    return gauge_ohm / (gauge_factor * strain) - gauge_ohm


def shunt_strain(gauge_ohm: float, shunt_ohm: float, gauge_factor: float) -> float:
    """Strain (compression, given positive) that a shunt simulates: Rg/(GF(Rg+Rc))."""
    return gauge_ohm / (gauge_factor * (gauge_ohm + shunt_ohm))


def shunt_output_ratio(gauge_ohm: float, shunt_ohm: float) -> float:
    """Bridge output of a shunted quarter bridge: -Rg/(4Rc + 2Rg)."""
    return -gauge_ohm / (4.0 * shunt_ohm + 2.0 * gauge_ohm)


def lead_wire_factor(gauge_ohm: float, lead_ohm: float) -> float:
    """Three-wire connection: loss of sensitivity Rg/(Rg+RL)."""
    return gauge_ohm / (gauge_ohm + lead_ohm)


def two_wire_factor(gauge_ohm: float, lead_ohm: float) -> float:
    """Two-wire connection: both leads lie in the gauge's arm, Rg/(Rg+2RL)."""
    return gauge_ohm / (gauge_ohm + 2.0 * lead_ohm)


def two_wire_offset(gauge_ohm: float, lead_ohm: float, gauge_factor: float) -> float:
    """Apparent strain of a two-wire quarter bridge at rest: 2RL/(Rg GF); drifts with the leads' temperature."""
    return 2.0 * lead_ohm / (gauge_ohm * gauge_factor)


def shunt_gain(measured_ratio: float, gauge_ohm: float, shunt_ohm: float) -> float:
    """Shunt check: measured change of the output over the computed one; 1 is a chain without error.

    With the shunt at the amplifier and three wires, the loss of the leads shows here as it does in the strain
    (to first order); divide the indicated strain by it.
    """
    return measured_ratio / shunt_output_ratio(gauge_ohm, shunt_ohm)
