"""Rollers that do not roll: how much lower the true stress may be. One-sided, so never part of a +-
uncertainty.

First principles: friction forces mu F/2 at each roller act h/2 from the axis. The full
coefficient is the worst case; rollers that roll freely have none. Wedging, twist and tangency are not
estimated here.
"""

from __future__ import annotations

from daq.mechanics.sections import Section, Spans

FIXED_ROLLER_FRICTION = 0.3  # common practice for ceramic on steel, no source


def friction_share_max(section: Section, spans: Spans, friction: float = FIXED_ROLLER_FRICTION) -> float:
    """Greatest relative error: true stress lies between (1 - this) and 1 times nominal.

    Four-point: mu h/a, half of it from each pair. Three-point: mu h/L from the moment and mu h/(3L) from the
    axial force of the two supports (exact for a rectangle; the axial part differs slightly for round bars).
    """
    if spans.load_mm > 0:
        return friction * section.depth_mm / spans.arm_mm
    return 4.0 * friction * section.depth_mm / (3.0 * spans.support_mm)
