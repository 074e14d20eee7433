"""What gives besides the bar: a measured table of force against deflection, removed from crosshead travel.

Outside the measured force range there is no answer (NaN), never an extrapolation.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from daq.mechanics.quantity import Floats


@dataclass(frozen=True, slots=True, eq=False)
class ComplianceTable:
    """force_n strictly increasing, deflection_mm not falling; both read-only."""

    force_n: Floats
    deflection_mm: Floats

    def __post_init__(self) -> None:
        assert self.force_n.shape == self.deflection_mm.shape and self.force_n.size >= 2
        assert bool(np.all(np.diff(self.force_n) > 0)) and bool(np.all(np.diff(self.deflection_mm) >= 0))
        self.force_n.flags.writeable = False
        self.deflection_mm.flags.writeable = False

    @property
    def force_n_min(self) -> float:
        return float(self.force_n[0])

    @property
    def force_n_max(self) -> float:
        return float(self.force_n[-1])


def machine_deflection_mm(table: ComplianceTable, force_n: Floats) -> Floats:
    """The machine's part at these forces, piecewise linear; NaN outside the measured range."""
    return np.interp(force_n, table.force_n, table.deflection_mm, left=np.nan, right=np.nan)


def remove_machine_mm(table: ComplianceTable, travel_mm: Floats, force_n: Floats) -> Floats:
    """Crosshead travel less the machine's part: what the bar did. A constant is left to the toe offset."""
    return travel_mm - machine_deflection_mm(table, force_n)


def machine_share(table: ComplianceTable, force_n_low: float, force_n_high: float, bar_mm: float) -> float:
    """Machine part of the whole travel between two forces, where the bar's part is bar_mm; NaN outside the table."""
    ends_mm = machine_deflection_mm(table, np.array([force_n_low, force_n_high]))
    machine_mm = float(ends_mm[1] - ends_mm[0])
    whole_mm = machine_mm + bar_mm
    return machine_mm / whole_mm if whole_mm > 0 else float("nan")
