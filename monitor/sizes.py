"""Sizes for eyes two metres away, from the screen's real pixel density. Pure.

20' to 22' of arc for what must be read at 2 m: 12 to 13 mm capitals; 30' for the state word and the load: 17 mm
(ISO 9241-3 as quoted publicly: at least 16', better 20' to 22').
"""

from __future__ import annotations

from dataclasses import dataclass

STATE_CAP_MM, CHIEF_CAP_MM, SMALL_CAP_MM = 17.0, 12.5, 3.4
PANEL_MM = 290.0  # height of the panel the full sizes are laid out for: a 24-inch screen
SHARE_MIN = 0.45
PIXEL_MM_USUAL = 0.277  # of a 24-inch panel of 1920 x 1080, where the screen does not tell
PIXEL_MM_MIN, PIXEL_MM_MAX = 0.05, 1.0
DISTANCE_M = 2.0
FIGURE_CAP_SHARE = 0.729  # capital height of DejaVu Sans in parts of its size


@dataclass(frozen=True, slots=True)
class Sizes:
    """Everything in pixels. share: of the full sizes, below 1 where the window is too low for 2 m."""

    pixel_mm: float
    share: float

    @property
    def state_px(self) -> float:
        """Font size of the state word and of the chief number."""
        return self._font(STATE_CAP_MM)

    @property
    def chief_px(self) -> float:
        return self._font(CHIEF_CAP_MM)

    @property
    def small_px(self) -> float:
        """Font size of what is read at arm's length; never below 11 pixels."""
        return max(11.0, SMALL_CAP_MM * max(self.share, 0.75) / self.pixel_mm / FIGURE_CAP_SHARE)

    @property
    def distance_m(self) -> float:
        """From how far the state word has its 30' of arc."""
        return DISTANCE_M * self.share

    def px(self, mm: float) -> float:
        """A length on the glass, shrunk like the letters."""
        return mm * self.share / self.pixel_mm

    def _font(self, cap_mm: float) -> float:
        return self.px(cap_mm) / FIGURE_CAP_SHARE


def sizes_for(height_px: float, pixel_mm: float) -> Sizes:
    """For a window of this height. A density that cannot be true is replaced by the usual one."""
    if not PIXEL_MM_MIN <= pixel_mm <= PIXEL_MM_MAX:
        pixel_mm = PIXEL_MM_USUAL
    share = min(1.0, max(SHARE_MIN, height_px * pixel_mm / PANEL_MM))
    return Sizes(pixel_mm, share)
