"""Result: every number of one loading, each with its unit in its name; None where it does not exist.

Nominal beam stress is the strength. Corrections (chamfer, after-zero) stand beside it and are never folded
in.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from daq.results.peak import Peak
from daq.results.printed import NOTHING_PRINTED, Printed
from daq.results.rules import Counting, Remark
from daq.results.stiffness import Modulus
from daq.results.tracking import Rates
from daq.results.uncertainty import COVERAGE, Contributor, Uncertainty
from daq.results.verdict import Verdict
from daq.results.zero import AfterZero

SCHEMA_VERSION = 2
"""Raised whenever words of a result change their meaning; numbers never do. 2: the verdict is judged by the method's
rules, where 1 said only provisional or interrupted."""


@dataclass(frozen=True, slots=True)
class Loads:
    """Net loads. used_n: what the strength is computed from (the method says raw or recovered); None without
    a break.
    """

    raw_n: float | None
    raw_gross_n: float | None
    raw_at_s: float | None
    screened_n: float | None
    recovered: Peak | None
    used_n: float | None
    used: str
    first_drop_n: float | None
    first_drop: str
    sigma_n: float | None
    fall_time_constant_s: float | None


@dataclass(frozen=True, slots=True)
class Stresses:
    """survived_mpa: highest nominal stress of a bar that did not break."""

    strength_mpa: float | None
    chamfer_factor: float | None
    zero_corrected_mpa: float | None
    survived_mpa: float | None
    per_newton_mpa: float | None
    printed: Printed = NOTHING_PRINTED


@dataclass(frozen=True, slots=True)
class Course:
    """Times are counted from the opening of the run; displacement at the break, toe taken off.

    toe_share: toe load over the highest; work_mj: area under load over displacement from contact to the break, of the
    bar alone where the machine's part was removed.
    """

    seated_s: float | None
    toe_n: float | None
    toe_share: float | None
    toe_offset_mm: float | None
    time_to_break_s: float | None
    strain_at_break: float | None
    deflection_at_break_mm: float | None
    displacement: str
    work_mj: float | None
    rates: Rates | None


@dataclass(frozen=True, slots=True)
class Result:
    """The whole reduction of one loading."""

    verdict: Verdict
    break_class: str
    interrupted: bool
    reason: str
    loads: Loads
    stresses: Stresses
    course: Course
    modulus: Modulus | str
    tare_n: float | None
    after_zero: AfterZero | None
    residual_n: float | None
    unloaded: bool | None
    uncertainty: Uncertainty | None
    samples: int
    samples_unusable: int
    sample_period_s: float | None
    events: tuple[Mapping[str, Any], ...]
    missing: tuple[str, ...]
    remarks: tuple[Remark, ...]

    @property
    def counting(self) -> Counting:
        return self.verdict.counting

    def as_json(self) -> dict[str, Any]:
        """Plain values only; a number that is not finite becomes null."""
        return {
            "schema": SCHEMA_VERSION,
            **self.verdict.as_json(),
            "break_class": self.break_class,
            "interrupted": self.interrupted,
            "reason": self.reason,
            **_stresses(self.stresses, self.uncertainty),
            **_loads(self.loads),
            **_course(self.course, self.stresses.per_newton_mpa),
            **_modulus(self.modulus, self.stresses.chamfer_factor),
            "tare_n": _plain(self.tare_n),
            **_after_zero(self.after_zero),
            "residual_n": _plain(self.residual_n),
            "unloaded": self.unloaded,
            "uncertainty": _uncertainty(self.uncertainty),
            "samples": self.samples,
            "samples_unusable": self.samples_unusable,
            "sample_period_s": _plain(self.sample_period_s),
            "events": [dict(event) for event in self.events],
            "missing": list(self.missing),
            "remarks": [{"code": remark.code, "text": remark.text} for remark in self.remarks],
        }


def _plain(value: float | None) -> float | None:
    return None if value is None or not math.isfinite(value) else float(value)


def _times(value: float | None, factor: float | None) -> float | None:
    return None if value is None or factor is None else _plain(value * factor)


def _stresses(stresses: Stresses, uncertainty: Uncertainty | None) -> dict[str, Any]:
    strength = stresses.strength_mpa
    share = None if uncertainty is None else uncertainty.share
    u_mpa = _times(strength, share)
    return {
        "strength_mpa": _plain(strength),
        "strength_u_mpa": u_mpa,
        "strength_u_k2_mpa": _times(u_mpa, COVERAGE),
        "strength_u_k2_percent": None if strength is None else _times(share, 100.0 * COVERAGE),
        "chamfer_factor": _plain(stresses.chamfer_factor),
        "strength_chamfer_mpa": _times(strength, stresses.chamfer_factor),
        "strength_zero_corrected_mpa": _plain(stresses.zero_corrected_mpa),
        "stress_survived_mpa": _plain(stresses.survived_mpa),
        "breaking_strength_n": _plain(stresses.printed.breaking_strength_n),
        "strength_plate_mpa": _plain(stresses.printed.plate_mpa),
        "strength_rounded_factor_mpa": _plain(stresses.printed.rounded_factor_mpa),
        "strength_large_deflection_mpa": _plain(stresses.printed.large_deflection_mpa),
    }


def _loads(loads: Loads) -> dict[str, Any]:
    peak = loads.recovered
    return {
        "peak_n": _plain(loads.used_n),
        "peak_used": loads.used,
        "peak_raw_n": _plain(loads.raw_n),
        "peak_raw_gross_n": _plain(loads.raw_gross_n),
        "peak_raw_at_s": _plain(loads.raw_at_s),
        "peak_screened_n": _plain(loads.screened_n),
        "peak_recovered_n": None if peak is None else _plain(peak.load_n),
        "peak_recovered_u_n": None if peak is None else _plain(peak.u_n),
        "peak_method": "" if peak is None else peak.method.value,
        "peak_window_s": None if peak is None else _plain(peak.window_s),
        "peak_samples": None if peak is None else peak.samples,
        "peak_lag_n": None if peak is None else _plain(peak.lag_n),
        "break_at_s": None if peak is None else _plain(peak.onset_s),
        "first_drop_n": _plain(loads.first_drop_n),
        "first_drop": loads.first_drop,
        "noise_sigma_n": _plain(loads.sigma_n),
        "fall_time_constant_s": _plain(loads.fall_time_constant_s),
    }


def _course(course: Course, per_newton_mpa: float | None) -> dict[str, Any]:
    rates = course.rates
    found = {
        "seated_at_s": _plain(course.seated_s),
        "toe_n": _plain(course.toe_n),
        "toe_share_percent": _times(course.toe_share, 100.0),
        "toe_offset_mm": _plain(course.toe_offset_mm),
        "time_to_break_s": _plain(course.time_to_break_s),
        "strain_at_break": _plain(course.strain_at_break),
        "deflection_at_break_mm": _plain(course.deflection_at_break_mm),
        "displacement": course.displacement,
        "work_to_break_mj": _plain(course.work_mj),
    }
    for name in ("mean", "min", "max"):
        rate_n_s = None if rates is None else float(getattr(rates, f"{name}_n_s"))
        found[f"force_rate_{name}_n_s"] = _plain(rate_n_s)
        found[f"stress_rate_{name}_mpa_s"] = _times(rate_n_s, per_newton_mpa)
    found["rate_interrupted_s"] = None if rates is None else _plain(rates.interrupted_s)
    return found


def _modulus(modulus: Modulus | str, chamfer_factor: float | None) -> dict[str, Any]:
    """corrected: for shear and for the second moment that the chamfers take away."""
    found = None if isinstance(modulus, str) else modulus
    return {
        "modulus_gpa": None if found is None else _plain(found.nominal_gpa),
        "modulus_shear_gpa": None if found is None else _plain(found.shear_gpa),
        "modulus_corrected_gpa": None if found is None else _times(found.shear_gpa, chamfer_factor or 1.0),
        "modulus_u_slope_gpa": None if found is None else _times(found.nominal_gpa, found.u_slope_share),
        "modulus_source": "" if found is None else found.source,
        "modulus_refused": modulus if isinstance(modulus, str) else "",
        "bar_stiffness_n_mm": None if found is None else _plain(found.stiffness_n_mm),
        "machine_part_percent": None if found is None else _times(found.machine_share, 100.0),
    }


def _after_zero(after: AfterZero | None) -> dict[str, Any]:
    return {
        "after_zero_n": None if after is None else _plain(after.shift_n),
        "after_zero_flagged": None if after is None else after.flagged,
        "after_zero_cause": "" if after is None else after.cause,
        "zero_correction_n": None if after is None else _plain(after.correction_n),
    }


def _uncertainty(found: Uncertainty | None) -> dict[str, Any] | None:
    if found is None:
        return None

    def listed(parts: tuple[Contributor, ...]) -> list[dict[str, Any]]:
        return [{"name": part.name, "percent": _times(part.share, 100.0)} for part in parts]

    return {
        "coverage_factor": COVERAGE,
        "contributors": listed(found.contributors),
        "not_included": list(found.not_included),
        "one_sided_lower": listed(found.one_sided),
    }
