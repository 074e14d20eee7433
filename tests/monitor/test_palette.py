"""Colours: contrast by WCAG's arithmetic, and what is left of them for eyes that see fewer, and on a grey print."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest

from monitor.palette import (
    BLUE,
    FILLS,
    GREEN,
    LINE_CONTRAST_MIN,
    ORANGE,
    SKY,
    TEXT_CONTRAST_MIN,
    THEMES,
    VERMILION,
    Theme,
    contrast,
    luminance,
)
from monitor.presenter import Tone

# Okabe and Ito, "Color Universal Design" (2002, revised 2008): the published sRGB values.
PUBLISHED = {
    ORANGE: (230, 159, 0),
    SKY: (86, 180, 233),
    GREEN: (0, 158, 115),
    BLUE: (0, 114, 178),
    VERMILION: (213, 94, 0),
}
# Machado, Oliveira, Fernandes, "A physiologically-based model for simulation of color vision deficiency", IEEE TVCG 15
# (2009) 1291, table for severity 1.0; from memory, each row sums to one. Applied to linear light.
VISIONS = {
    "protanopia": (
        (0.152286, 1.052583, -0.204868),
        (0.114503, 0.786281, 0.099216),
        (-0.003882, -0.048116, 1.051998),
    ),
    "deuteranopia": (
        (0.367322, 0.860646, -0.227968),
        (0.280085, 0.672501, 0.047413),
        (-0.011820, 0.042940, 0.968881),
    ),
    "tritanopia": (
        (1.255528, -0.076749, -0.178779),
        (-0.078411, 0.930809, 0.147602),
        (0.004733, 0.691367, 0.303900),
    ),
    "grey print": ((0.2126, 0.7152, 0.0722),) * 3,
}


def linear(colour: str) -> np.ndarray:
    parts = np.array([int(colour[place : place + 2], 16) for place in (1, 3, 5)]) / 255.0
    return np.where(parts <= 0.03928, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)


def seen(colour: str, vision: str) -> str:
    light = np.clip(np.array(VISIONS[vision]) @ linear(colour), 0.0, 1.0)
    parts = np.where(light <= 0.0031308, 12.92 * light, 1.055 * light ** (1 / 2.4) - 0.055)
    return "#" + "".join(f"{round(255 * part):02x}" for part in parts)


def test_the_hues_are_the_published_ones() -> None:
    for colour, parts in PUBLISHED.items():
        assert tuple(int(colour[place : place + 2], 16) for place in (1, 3, 5)) == parts


def test_contrast_agrees_with_the_values_wcag_states() -> None:
    assert contrast("#000000", "#ffffff") == pytest.approx(21.0)  # WCAG 2.1: the largest there is
    assert contrast("#777777", "#ffffff") == pytest.approx(
        4.48, abs=0.005
    )  # the well-known grey just below AA
    assert luminance("#ffffff") == pytest.approx(1.0)


@pytest.mark.parametrize("theme", THEMES.values(), ids=lambda theme: theme.name)
def test_every_text_and_every_line_can_be_seen(theme: Theme) -> None:
    for letters, on in theme.texts:
        assert contrast(letters, on) >= TEXT_CONTRAST_MIN, (letters, on)
    for line, on in theme.lines:
        assert contrast(line, on) >= LINE_CONTRAST_MIN, (line, on)


@pytest.mark.parametrize("vision", VISIONS)
@pytest.mark.parametrize("theme", THEMES.values(), ids=lambda theme: theme.name)
def test_text_and_lines_stay_legible_for_other_eyes(theme: Theme, vision: str) -> None:
    for letters, on in theme.texts:
        large = on in FILLS.values()  # black capitals of 17 mm: WCAG asks 3 of large letters
        least = LINE_CONTRAST_MIN if large else TEXT_CONTRAST_MIN
        assert contrast(seen(letters, vision), seen(on, vision)) >= least, (letters, on)
    for line, on in theme.lines:
        assert contrast(seen(line, vision), seen(on, vision)) >= LINE_CONTRAST_MIN - 0.3, (line, on)


def test_no_two_tones_share_a_shape_and_grey_print_would_need_one() -> None:
    """On grey print some fills are alike: that is why each tone has a shape of its own (looked at pixel by pixel in
    test_window_paint)."""
    greys = {tone: luminance(seen(fill, "grey print")) for tone, fill in FILLS.items()}
    alike = [pair for pair in combinations(greys, 2) if abs(greys[pair[0]] - greys[pair[1]]) < 0.1]
    assert alike and len(set(FILLS)) == len(Tone)
