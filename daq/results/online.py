"""OnlineReduction: net load, stress, displacement, strain, rates and stiffness while a bar is being loaded.
Pure.

For screens only: the record's numbers come from `reduce`. Fed block by block, in order; O(1) a sample; any
cut of the stream gives the same numbers (to rounding). Displacement is counted from contact, after seating
from where the straight part begins; the machine's part is taken off where a table for this fixture and cell
exists.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from daq.cards.frame import FrameCard
from daq.cards.method import MethodCard
from daq.cards.series import Specimen
from daq.mechanics.compliance import remove_machine_mm
from daq.mechanics.deflection import (
    load_point_stiffness_n_mm,
    mid_stiffness_n_mm,
    strain_per_load_point_mm,
    strain_per_mid_mm,
)
from daq.results.expected import band_of
from daq.results.live import RunningStiffness, WindowSlope
from daq.results.samples import MEDIAN_SAMPLES, running_median
from daq.results.setup import setup_of
from daq.stream.block import Floats

CONTACT_SIGMAS = 10.0
CONTACT_SHARE = 0.003  # of the median expected break load
STIFFNESS_FROM_SHARE = 0.15  # of the median expected break load; trade judgement, no source
QUIET_UNTIL_SHARE = 0.05  # the stiffness is not shown before its own 2 sigma is below this


class OnlineReduction:
    """One loading of one bar. strengths_mpa: of the bars of this series so far, for the break band."""

    COLUMNS = ("time_s", "stress_mpa", "deflection_mm", "net_n", "strain")

    def __init__(
        self,
        frame: FrameCard,
        method: MethodCard,
        specimen: Specimen,
        fixture: str,
        strengths_mpa: Sequence[float] = (),
    ) -> None:
        self._setup = setup_of(frame, method, specimen, fixture)
        self._per_newton_mpa = self._setup.stress_per_newton_mpa
        self._band = band_of(method, strengths_mpa)
        self._median_n = self._band.median_mpa / self._per_newton_mpa
        self._at_bar = _sensor_at_bar(frame)
        self._strain_per_mm = self._strain_factor()
        noise_n = frame.cell.noise_quiet_n or 0.0
        self._contact_n = max(CONTACT_SIGMAS * noise_n, CONTACT_SHARE * self._median_n)
        self._tare_n = 0.0
        self._contact_mm = math.nan
        self._toe_mm = 0.0
        self._seated = self._broken = False
        self._rate = WindowSlope()
        self._travel_rate = WindowSlope()
        self._stiffness = RunningStiffness()
        self._tail_n: Floats = np.empty(0)
        self._highest_n = math.nan
        self._last: dict[str, float] = {}

    # --- what the watch has said
    # --------------------------------------------------------------------------------

    def tare(self, tare_n: float) -> None:
        """From now on net is gross less this; what was seen before the tare is forgotten."""
        self._tare_n = tare_n
        self._tail_n = np.empty(0)
        self._highest_n = math.nan
        self._rate.clear()
        self._travel_rate.clear()

    def seated(self, toe_offset_mm: float) -> None:
        """The straight part has begun: count displacement from where its line meets zero load.

        The watch's own toe is used only where no slope of travel is known yet: its contact is another sample
        than ours.
        """
        if self._seated:
            return
        stiffness_n_mm = (
            self._rate.slope / self._travel_rate.slope if self._travel_rate.slope > 0 else math.nan
        )
        toe_mm = (
            self._last.get("deflection_mm", math.nan) - self._last.get("net_n", math.nan) / stiffness_n_mm
        )
        self._seated, self._toe_mm = True, toe_mm if math.isfinite(toe_mm) else toe_offset_mm

    def broken(self) -> None:
        """Rates and stiffness have come to their end."""
        self._broken = True

    # --- samples
    # ------------------------------------------------------------------------------------------------

    def feed(self, time_s: Floats, gross_n: Floats, along_mm: Floats) -> Floats:
        """One block, (n,) each; along_mm from the deflection sensor or the crosshead, NaN where there is
        none.

        Returns (n, 5): COLUMNS.
        """
        net_n = gross_n - self._tare_n
        travel_mm = self._travel(net_n, along_mm)
        table = np.column_stack(
            (time_s, net_n * self._per_newton_mpa, travel_mm, net_n, travel_mm * self._strain_per_mm)
        )
        usable = np.isfinite(net_n)
        if usable.any():
            self._learn(time_s[usable], net_n[usable], travel_mm[usable])
            self._last = dict(zip(self.COLUMNS, table[np.flatnonzero(usable)[-1]].tolist(), strict=True))
        return table

    def _travel(self, net_n: Floats, along_mm: Floats) -> Floats:
        """Displacement of the bar: sign, contact, toe and the machine's part taken into account."""
        if self._at_bar:
            travel_mm = along_mm
        else:
            travel_mm = along_mm * self._setup.position_sign
        from_contact_mm = (
            travel_mm - self._contact(net_n, travel_mm) - (self._toe_mm if self._seated else 0.0)
        )
        table = self._setup.compliance
        if self._at_bar or table is None:
            return from_contact_mm
        return remove_machine_mm(table, from_contact_mm, np.maximum(net_n, table.force_n_min))

    def _contact(self, net_n: Floats, travel_mm: Floats) -> Floats:
        """Where the bar was last not in contact, for each sample; stands still once seated or broken."""
        if self._seated or self._broken:
            return np.full(net_n.size, self._contact_mm)
        free = (net_n < self._contact_n) & np.isfinite(travel_mm)
        place = np.maximum.accumulate(np.where(free, np.arange(net_n.size), -1))
        contact_mm = np.where(place >= 0, travel_mm[place], self._contact_mm)
        if net_n.size:
            self._contact_mm = float(contact_mm[-1])
        return contact_mm

    def _learn(self, time_s: Floats, net_n: Floats, travel_mm: Floats) -> None:
        if self._broken:
            return
        self._rate.feed(time_s, net_n)
        window_n = np.concatenate((self._tail_n, net_n))
        self._tail_n = window_n[-(MEDIAN_SAMPLES - 1) :]
        if window_n.size >= MEDIAN_SAMPLES:
            half = MEDIAN_SAMPLES // 2
            self._highest_n = float(np.fmax(self._highest_n, running_median(window_n)[half:-half].max()))
        known = np.isfinite(travel_mm)
        if not self._seated:
            self._travel_rate.feed(time_s[known], travel_mm[known])
        else:
            good = known & (net_n >= STIFFNESS_FROM_SHARE * self._median_n)
            self._stiffness.feed(net_n[good], travel_mm[good])

    # --- numbers of now
    # -----------------------------------------------------------------------------------------

    def summary(self) -> dict[str, float | bool | None]:
        """The newest numbers; None where there is none. Forces net unless they say gross."""
        rate_n_s = math.nan if self._broken else self._rate.slope
        net_n = self._last.get("net_n", math.nan)
        numbers = {
            **{name: self._last.get(name, math.nan) for name in self.COLUMNS},
            "gross_n": net_n + self._tare_n,
            "highest_n": self._highest_n,
            "force_rate_n_s": rate_n_s,
            "stress_rate_mpa_s": rate_n_s * self._per_newton_mpa,
            **self._stiffness_numbers(),
            "expected_n": self._median_n,
            "expected_percent": 100.0 * net_n / self._median_n,
            **self._band_numbers(net_n, rate_n_s),
        }
        said: dict[str, float | bool | None] = {
            name: value if math.isfinite(value) else None for name, value in numbers.items()
        }
        said["in_band"] = bool(self._band.low_mpa <= net_n * self._per_newton_mpa <= self._band.high_mpa)
        said["band_from_bars"] = self._band.from_bars
        return said

    def _band_numbers(self, net_n: float, rate_n_s: float) -> dict[str, float]:
        low_n, high_n = (edge / self._per_newton_mpa for edge in (self._band.low_mpa, self._band.high_mpa))
        to_band_s = max(low_n - net_n, 0.0) / rate_n_s if rate_n_s > 0 else math.nan
        return {"band_low_n": low_n, "band_high_n": high_n, "to_band_s": to_band_s}

    def _stiffness_numbers(self) -> dict[str, float]:
        """Quiet until the stiffness is known to 5 %; expected: of the bar alone where the machine's
        part is known.
        """
        share = self._stiffness.two_sigma_share
        found = self._stiffness.stiffness_n_mm if share < QUIET_UNTIL_SHARE else math.nan
        return {
            "stiffness_n_mm": found,
            "stiffness_2sigma_percent": 100.0 * share,
            "stiffness_of_expected": found / self._expected_stiffness(),
        }

    def _expected_stiffness(self) -> float:
        """NaN where crosshead travel still holds the machine's part: it is not comparable then."""
        section, spans, method = self._setup.section, self._setup.spans, self._setup.method
        if section is None or spans is None or method is None:
            return math.nan
        modulus_mpa = 1e3 * method.expected.modulus_gpa
        if self._at_bar:
            return mid_stiffness_n_mm(modulus_mpa, section, spans)
        return (
            math.nan
            if self._setup.compliance is None
            else load_point_stiffness_n_mm(modulus_mpa, section, spans)
        )

    def _strain_factor(self) -> float:
        """Strain per mm of displacement; NaN where displacement does not tell it."""
        section, spans = self._setup.section, self._setup.spans
        if section is None or spans is None:
            return math.nan
        if self._at_bar:
            return strain_per_mid_mm(section, spans)
        return math.nan if self._setup.compliance is None else strain_per_load_point_mm(section, spans)


def _sensor_at_bar(frame: FrameCard) -> bool:
    """The force's own link carries a deflection sensor: it is then what displacement comes from."""
    links = {channel.link for channel in frame.channels if channel.role == "force"}
    return any(channel.role == "deflection" and channel.link in links for channel in frame.channels)
