"""Choices of whoever opens the window. Pure; imports no Qt."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Setting:
    """Choices of whoever opens the window. pixel_mm: of the screen, None: ask the screen."""

    theme: str = "dark"
    pixel_mm: float | None = None
    stress_first: bool = False
    verdict_first: bool = False
    tones: bool = False
    pedal_stop: str = ""
    pedal_start: str = ""
