"""Course: how the loading went - times, toe, displacement at the break, achieved rates."""

from __future__ import annotations

import math

import numpy as np

from daq.results.fits import fit_curve
from daq.results.loading import Loading
from daq.results.peak import Peak
from daq.results.result import Course
from daq.results.samples import along_of
from daq.results.setup import Setup
from daq.results.stiffness import ROLES, Bending, bending_of, strain_of
from daq.results.tracking import rates_of
from daq.stream.block import Floats
from daq.stream.rundata import ChannelData, RunData

WINDOW_SAMPLES = 5.0


def bending_beside(run: RunData, force: ChannelData, loading: Loading) -> Bending | None:
    """The channel the method's modulus asks for, else the first that is there."""
    if loading.samples.count < 2:
        return None
    wanted = "no" if loading.setup.method is None else loading.setup.method.modulus
    for role in sorted(ROLES.values(), key=lambda role: role != ROLES.get(wanted)):
        along = along_of(run, role, force, loading.samples)
        if along is not None:
            return bending_of(along, loading.samples, loading.setup, loading.inside, loading.highest_n)
    return None


def course_of(loading: Loading, peak: Peak | None, bending: Bending | None) -> Course:
    """What there is of it; None for the rest."""
    inside, story = loading.inside, loading.story
    strains = None if bending is None else strain_of(bending, loading.setup)
    travels = None if bending is None or bending.role == "strain" else bending.values
    toe_n = loading.net_n(story.seated_load_n)
    lasts = peak is not None and math.isfinite(loading.contact_s)
    return Course(
        seated_s=story.seated_s,
        toe_n=toe_n,
        toe_share=None if toe_n is None or not loading.highest_n > 0 else toe_n / loading.highest_n,
        toe_offset_mm=_toe_offset_mm(loading, bending),
        time_to_break_s=peak.onset_s - loading.contact_s if peak is not None and lasts else None,
        strain_at_break=_at_break(loading, strains, peak),
        deflection_at_break_mm=_at_break(loading, travels, peak),
        displacement=_words(bending),
        work_mj=_work_mj(loading, travels, peak),
        rates=rates_of(
            loading.samples.time_s[inside],
            loading.samples.load_n[inside],
            from_s=loading.seated_s,
            peak_n=loading.highest_n,
            until_s=loading.end_s,
        ),
    )


def _toe_offset_mm(loading: Loading, bending: Bending | None) -> float | None:
    """Travel from contact to where the line through 20 to 80 % of the peak begins; the watch's own only
    without it.

    The toe is already off `values`, so at contact they read minus the toe.
    """
    if bending is not None and bending.role != "strain" and math.isfinite(bending.toe_offset):
        known = np.flatnonzero(np.isfinite(bending.values) & (loading.samples.time_s >= loading.contact_s))
        if known.size:
            return -float(bending.values[known[0]])
    return loading.story.toe_offset_mm


def _words(bending: Bending | None) -> str:
    if bending is None:
        return "none"
    if bending.role == "position":
        return (
            "crosshead, compliance removed"
            if bending.machine_removed
            else "crosshead, machine part not removed"
        )
    return "deflection sensor at mid-span" if bending.role == "deflection" else "strain gauge"


def _at_break(loading: Loading, values: Floats | None, peak: Peak | None) -> float | None:
    """Carried to the break by a line through the samples of the peak's own window."""
    if values is None or peak is None:
        return None
    time_s = loading.samples.time_s
    window_s = max(peak.window_s, WINDOW_SAMPLES * loading.samples.period_s)
    inside = np.isfinite(values) & (time_s <= loading.end_s) & (time_s >= peak.onset_s - window_s)
    if inside.sum() < 2:
        return None
    return fit_curve(time_s[inside], values[inside], 2).at(peak.onset_s)


def _work_mj(loading: Loading, travels: Floats | None, peak: Peak | None) -> float | None:
    """N mm = mJ, by trapezoids over clean samples from contact; the piece to the recovered peak is added."""
    if travels is None or peak is None:
        return None
    inside = np.flatnonzero(loading.inside & np.isfinite(travels))
    if inside.size < 2:
        return None
    load_n, at_mm = loading.samples.load_n[inside], travels[inside]
    at_break_mm = _at_break(loading, travels, peak)
    if at_break_mm is not None:
        load_n, at_mm = np.append(load_n, peak.load_n), np.append(at_mm, at_break_mm)
    return float(np.sum(0.5 * (load_n[1:] + load_n[:-1]) * np.diff(at_mm)))


def at_mid_span(bending: Bending | None, setup: Setup) -> bool:
    """Whether the displacement is the bar's deflection at mid-span: a sensor there, or a crosshead in three-point."""
    if bending is None or bending.role == "strain":
        return False
    three_point = setup.spans is not None and setup.spans.load_mm == 0
    return bending.role == "deflection" or (three_point and bending.machine_removed)
