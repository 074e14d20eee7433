"""Toe, stiffness and Young's modulus from load and displacement.

The modulus is shown only where it means something: a sensor at the bar, or crosshead travel whose machine
part is measured, inside its table, and less than half of the travel. Otherwise the reason is the answer.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from daq.mechanics.compliance import machine_share, remove_machine_mm
from daq.mechanics.deflection import (
    modulus_from_load_point_slope_mpa,
    modulus_from_mid_slope_mpa,
    shear_share_load_point,
    shear_share_mid,
    strain_per_load_point_mm,
    strain_per_mid_mm,
)
from daq.results.fits import fit_curve
from daq.results.samples import Along, Samples
from daq.results.setup import Setup
from daq.stream.block import Floats

SLOPE_SHARES = (0.2, 0.6)  # of the peak: the modulus
TOE_SHARES = (0.2, 0.8)  # of the peak: the final toe offset
MACHINE_SHARE_MAX = 0.5
POINTS_MIN = 8
ROLES = {"deflection": "deflection", "strain": "strain", "crosshead": "position"}  # by the method's word
SOURCES = {
    "deflection": "from the deflection sensor at the bar",
    "position": "from the crosshead, compliance removed",
    "strain": "from the strain gauge",
}


@dataclass(frozen=True, slots=True, eq=False)
class Bending:
    """What the bar did beside each force sample. values: mm at the place the role says, or strain; toe taken
    off.

    role: deflection (mid-span), position (load rollers, machine part removed) or strain. toe_offset: reading
    of the channel that was taken off, so that the straight part runs through zero.
    """

    role: str
    values: Floats
    toe_offset: float
    machine_removed: bool
    aligned: bool


@dataclass(frozen=True, slots=True)
class Modulus:
    """nominal_gpa by elementary beam; shear_gpa with the shear deflection taken into account; u: standard,
    of the slope.

    u_slope_share: relative standard error of the slope, correlation of the residuals regarded.
    """

    nominal_gpa: float
    shear_gpa: float
    u_slope_share: float
    stiffness_n_mm: float
    source: str
    machine_share: float


def bending_of(
    along: Along, samples: Samples, setup: Setup, usable: npt.NDArray[np.bool_], peak_n: float
) -> Bending:
    """Machine part and toe taken off. usable: samples of the loading, screened."""
    values, removed = along.values, False
    if along.role == "position":
        values = values * setup.position_sign
        if setup.compliance is not None:
            values = remove_machine_mm(setup.compliance, values, samples.load_n)
            removed = True
    toe = _toe_offset(values, samples.load_n, usable, peak_n)
    return Bending(along.role, values - toe if math.isfinite(toe) else values, toe, removed, along.aligned)


def _toe_offset(values: Floats, load_n: Floats, usable: npt.NDArray[np.bool_], peak_n: float) -> float:
    """Where the line through 20 to 80 % of the peak meets zero load; NaN without such a line."""
    inside = _between(values, load_n, usable, peak_n, TOE_SHARES)
    if inside.sum() < POINTS_MIN:
        return float("nan")
    line = fit_curve(load_n[inside], values[inside], 2)
    return line.at(0.0)


def _between(
    values: Floats, load_n: Floats, usable: npt.NDArray[np.bool_], peak_n: float, shares: tuple[float, float]
) -> npt.NDArray[np.bool_]:
    low, high = shares
    inside: npt.NDArray[np.bool_] = usable & np.isfinite(values)
    return inside & (load_n >= low * peak_n) & (load_n <= high * peak_n)


def strain_of(bending: Bending, setup: Setup) -> Floats | None:
    """Outer-fibre strain; None where the crosshead's machine part is not known, or sizes are missing."""
    if bending.role == "strain":
        return bending.values
    if setup.section is None or setup.spans is None:
        return None
    if bending.role == "deflection":
        return bending.values * strain_per_mid_mm(setup.section, setup.spans)
    return (
        bending.values * strain_per_load_point_mm(setup.section, setup.spans)
        if bending.machine_removed
        else None
    )


def modulus_of(
    bending: Bending | None, samples: Samples, setup: Setup, usable: npt.NDArray[np.bool_], peak_n: float
) -> Modulus | str:
    """Young's modulus, or why there is none."""
    reason = _refusal(bending, setup)
    if bending is None or reason:
        return reason
    inside = _between(bending.values, samples.load_n, usable, peak_n, SLOPE_SHARES)
    if inside.sum() < POINTS_MIN:
        return "too few samples with load and displacement (inside the table) between 20 and 60 % of the peak"
    line = fit_curve(
        samples.load_n[inside], bending.values[inside], 2
    )  # displacement over load: load is the better
    if not line.slope > 0:
        return "displacement does not grow with load between 20 and 60 % of the peak"
    share = _machine_share(bending, setup, peak_n, line.slope)
    if not share < MACHINE_SHARE_MAX:
        return f"the machine's own part is {100 * share:.0f} % of the travel; less than 50 % is needed"
    return _modulus(bending, setup, line.slope, line.u_term(1, line.spread), share)


def _refusal(bending: Bending | None, setup: Setup) -> str:
    wanted = "no" if setup.method is None else setup.method.modulus
    if wanted == "no":
        return "the method asks for none"
    if setup.section is None or setup.spans is None:
        return "sizes or spans are not known"
    if bending is None or bending.role != ROLES[wanted]:
        return f"no usable {wanted} channel"
    if bending.role == "position" and not bending.machine_removed:
        return "no compliance table for this fixture and cell: crosshead travel is not the bar's deflection"
    return ""


def _machine_share(bending: Bending, setup: Setup, peak_n: float, slope_mm_n: float) -> float:
    if bending.role != "position" or setup.compliance is None:
        return 0.0
    low_n, high_n = (share * peak_n for share in SLOPE_SHARES)
    return machine_share(setup.compliance, low_n, high_n, slope_mm_n * (high_n - low_n))


def _modulus(bending: Bending, setup: Setup, slope_mm_n: float, u_slope: float, share: float) -> Modulus:
    assert setup.section is not None and setup.spans is not None
    section, spans = setup.section, setup.spans
    nu = 0.25 if setup.method is None else setup.method.expected.poisson_ratio
    kappa = section.shear_coefficient(nu)
    if bending.role == "strain":
        nominal_mpa, shear = setup.stress_per_newton_mpa / slope_mm_n, 0.0
        stiffness_n_mm = math.nan
    elif bending.role == "deflection":
        nominal_mpa = modulus_from_mid_slope_mpa(1.0 / slope_mm_n, section, spans)
        shear, stiffness_n_mm = shear_share_mid(section, spans, nu, kappa), 1.0 / slope_mm_n
    else:
        nominal_mpa = modulus_from_load_point_slope_mpa(1.0 / slope_mm_n, section, spans)
        shear, stiffness_n_mm = shear_share_load_point(section, spans, nu, kappa), 1.0 / slope_mm_n
    return Modulus(
        nominal_gpa=nominal_mpa * 1e-3,
        shear_gpa=nominal_mpa * (1.0 + shear) * 1e-3,
        u_slope_share=u_slope / slope_mm_n,
        stiffness_n_mm=stiffness_n_mm,
        source=SOURCES[bending.role],
        machine_share=share,
    )
