"""Competing flaw populations: one fit per coded origin, every other bar suspended at its stress.

No bar is left out. One uncoded bar makes the separation a guess, so it is then not made.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from daq.series.weibull import WeibullFit, fit_weibull

UNKNOWN_CODES = frozenset({"", "-", "?"})


@dataclass(frozen=True, slots=True)
class Populations:
    """fits: by origin code; None for a code with too few breaks. uncoded: bars without a sure origin."""

    fits: Mapping[str, WeibullFit | None]
    uncoded: int

    @property
    def separated(self) -> bool:
        return len(self.fits) > 1


def fit_populations(
    strengths_mpa: Sequence[float], codes: Sequence[str], suspended_mpa: Sequence[float] = ()
) -> Populations:
    """Strengths with their origin codes, and bars that did not break. Uncoded bars: one population,
    and said so.
    """
    assert len(strengths_mpa) == len(codes)
    uncoded = sum(code in UNKNOWN_CODES for code in codes)
    kinds = sorted(set(codes) - UNKNOWN_CODES)
    if uncoded or len(kinds) < 2:
        name = kinds[0] if len(kinds) == 1 and not uncoded else "all"
        return Populations({name: fit_weibull(strengths_mpa, suspended_mpa)}, uncoded)
    pairs = list(zip(strengths_mpa, codes, strict=True))
    fits = {
        kind: fit_weibull(
            [stress for stress, code in pairs if code == kind],
            [*(stress for stress, code in pairs if code != kind), *suspended_mpa],
        )
        for kind in kinds
    }
    return Populations(fits, 0)
