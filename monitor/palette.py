"""Colours of the window: two themes from one published set, and the arithmetic that judges them. Pure.

Hues: the eight colours of Okabe and Ito, "Color Universal Design" (2002, revised 2008). A colour never speaks alone:
each tone has a word and a shape beside it. Contrast: WCAG 2.1, success criteria 1.4.3 and 1.4.11.
"""

from __future__ import annotations

from dataclasses import dataclass

from monitor.presenter import Tone

BLACK, WHITE = "#000000", "#ffffff"
ORANGE, SKY, GREEN = "#e69f00", "#56b4e9", "#009e73"
BLUE, VERMILION = "#0072b2", "#d55e00"

TEXT_CONTRAST_MIN = 4.5  # WCAG 2.1, 1.4.3
LINE_CONTRAST_MIN = 3.0  # WCAG 2.1, 1.4.11


@dataclass(frozen=True, slots=True)
class Theme:
    """Colours as #rrggbb. ink on ground and on panel is text; the fills carry black letters."""

    name: str
    ground: str
    panel: str
    ink: str
    faint: str  # small words, still text
    edge: str  # lines that must be seen
    ghost: str  # earlier bars
    trace: str
    bar: str  # the specimen
    roller: str
    moment: str

    @property
    def texts(self) -> tuple[tuple[str, str], ...]:
        """(letters, what they stand on) of every text of this theme."""
        plain = [(ink, on) for ink in (self.ink, self.faint) for on in (self.ground, self.panel)]
        return (*plain, *((BLACK, fill) for fill in FILLS.values()), (self.ink, self.moment))

    @property
    def lines(self) -> tuple[tuple[str, str], ...]:
        """(line, what it stands on)."""
        drawn = (self.trace, self.edge, self.ghost, self.roller, self.bar)
        return tuple((line, on) for line in drawn for on in (self.ground, self.panel))


FILLS = {Tone.GOOD: GREEN, Tone.CAUTION: ORANGE, Tone.STOP: VERMILION, Tone.PLAIN: SKY, Tone.OLD: "#a6a6a6"}

DARK = Theme(
    name="dark",
    ground="#0e1116",
    panel="#181d24",
    ink="#f4f4f0",
    faint="#b9c0c8",
    edge="#8b95a1",
    ghost="#747e8a",
    trace=SKY,
    bar="#cfc9b8",
    roller="#8795a6",
    moment="#1f3a52",
)
BRIGHT = Theme(
    name="bright",
    ground="#ffffff",
    panel="#f1f1ec",
    ink="#101214",
    faint="#4a5058",
    edge="#6b737c",
    ghost="#848b93",
    trace=BLUE,
    bar="#8a7f66",
    roller="#5d6a78",
    moment="#cfe3f2",
)
THEMES = {theme.name: theme for theme in (DARK, BRIGHT)}


def luminance(colour: str) -> float:
    """Relative luminance, WCAG 2.1 definition (sRGB, IEC 61966-2-1)."""
    parts = [int(colour[place : place + 2], 16) / 255.0 for place in (1, 3, 5)]
    linear = [part / 12.92 if part <= 0.03928 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(one: str, other: str) -> float:
    """Contrast ratio, WCAG 2.1 definition: 1 to 21."""
    low, high = sorted((luminance(one), luminance(other)))
    return (high + 0.05) / (low + 0.05)
