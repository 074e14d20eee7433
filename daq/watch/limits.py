"""Force limits on gross force: rows 1 to 5, and what every row tells the operator. Pure.

Prove the safe side: everything not shown to be inside is outside, NaN included. A limit is passed when two
consecutive samples lie outside; NaN, a rail, or one sample at 100 % of the cell's capacity passes at once; a
single outlier is counted, not obeyed. Limits are frozen once derived and can only be lowered.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from enum import Enum

from daq.cards.derived import WORKING_SHARE
from daq.watch.setup import RunSetup, WatchSetup

CAUTION_SHARE = 0.8
SPECIMEN_SHARE = 1.1
WRONG_SIGN_SHARE = 0.02
WRONG_SIGN_SIGMA = 20.0
INFINITE = float("inf")


@dataclass(frozen=True, slots=True)
class Words:
    """The two lines a fault needs: what, and what to do now."""

    what: str
    do_now: str


ROWS: Mapping[int, Words] = {
    0: Words("force above the method's limit", "take the bar off; check method and bar"),
    1: Words("force above the cell's working range", "take the load off by hand; check bar and fixture"),
    2: Words(
        "cell overloaded or converter at its rail", "take the load off; check the zero before the next bar"
    ),
    3: Words("force above the fixture's rating", "take the load off; look at the fixture"),
    4: Words("no break where one was expected", "look for a wrong bar or a blocked fixture"),
    5: Words("force has the wrong sign", "prove the polarity by hand before any motion"),
    8: Words("force rises far too fast", "look for a blocked fixture or a wrong speed unit"),
    9: Words(
        "no contact where it was expected: no specimen or no force signal", "look at bar and cell cable"
    ),
    10: Words(
        "force stays flat while moving in contact", "look for a slipped bar, a stalled drive, a dead cell"
    ),
    11: Words("travel from contact above its ceiling", "look at bar and fixture"),
    12: Words("run-on after the stop is too long", "press the emergency stop"),
    13: Words("end of the soft travel", "move away from the end"),
    14: Words("crosshead speed is not the one set", "look at drive and speed setting"),
    15: Words("force signal lost", "keep the shield shut: the specimen may be loaded"),
    16: Words("position signal lost", "keep the shield shut; look at the displacement sensor"),
    17: Words("noise above the quiet record", "look for a loose cable or a running motor"),
    25: Words("shield, emergency stop, drive or end switch", "clear it, reset, and start anew"),
    26: Words("the machine does not stop", "PRESS THE EMERGENCY STOP"),
    18: Words("mains hum in the force signal", "look at earth, screen and cable of the cell"),
    30: Words("bar left standing under load", "go on or take the bar off"),
    33: Words("the run has lasted too long", "look at bar and drive"),
}


class Reaction(Enum):
    STOP = "stopped"
    OVERLOAD = "stopped, overload noted"
    SIGNAL_LOST = "stopped, nothing driven back"
    CAUTION = "told"


@dataclass(frozen=True, slots=True)
class Trip:
    """A limit passed."""

    row: int
    value: float
    limit: float
    unit: str
    reaction: Reaction
    what: str = ""


@dataclass(frozen=True, slots=True)
class ForceLimits:
    """All force limits of the moment, gross N. A run adds the fixture's, the specimen's and the method's."""

    hard_n: float
    working_n: float
    wrong_sign_n: float
    rail_low_n: float
    rail_high_n: float
    caution_n: float
    fixture_n: float = INFINITE
    specimen_n: float = INFINITE
    specimen_caution_n: float = INFINITE
    method_n: float = INFINITE

    @property
    def ceiling_n(self) -> float:
        return min(
            self.hard_n, self.working_n, self.fixture_n, self.specimen_n, self.method_n, self.rail_high_n
        )

    @property
    def floor_n(self) -> float:
        return max(self.wrong_sign_n, self.rail_low_n)

    def tightened(self, method_n: float) -> ForceLimits:
        """The same with a lower method limit; a wider one is an error of the caller, who must refuse it."""
        assert 0 < method_n <= self.ceiling_n
        return replace(self, method_n=method_n)


def frame_limits(setup: WatchSetup, sigma_n: float) -> ForceLimits:
    """Without a run: rows 1, 2 and 5. Forces count from the commissioned zero, which no tare can move."""
    capacity, zero = setup.capacity_n, setup.frame.cell.zero_balance_n
    return ForceLimits(
        hard_n=capacity,
        working_n=WORKING_SHARE * capacity,
        wrong_sign_n=zero - max(WRONG_SIGN_SHARE * capacity, WRONG_SIGN_SIGMA * sigma_n),
        rail_low_n=setup.rails_n[0],
        rail_high_n=setup.rails_n[1],
        caution_n=CAUTION_SHARE * capacity,
    )


def run_limits(setup: WatchSetup, run: RunSetup, sigma_n: float) -> ForceLimits:
    """With a run: rows 3 and 4 and the method's own. The specimen's load stands on the commissioned zero."""
    zero = setup.frame.cell.zero_balance_n
    method_n = run.method.limits.force_n_max
    return replace(
        frame_limits(setup, sigma_n),
        fixture_n=WORKING_SHARE * run.fixture.rating_n,
        specimen_n=zero + SPECIMEN_SHARE * run.expected.load_p999_n,
        specimen_caution_n=zero + run.expected.load_p999_n,
        method_n=INFINITE if method_n is None else method_n,
    )


class ForceJudge:
    """Judges gross force sample by sample; carries how many samples in a row lay outside each limit."""

    __slots__ = ("_rows", "high_n", "low_n", "outliers", "outside")

    def __init__(self, limits: ForceLimits) -> None:
        self.outliers = 0
        self.outside: dict[int, int] = {}  # place of a row -> samples outside it so far
        self.take(limits)

    def take(self, limits: ForceLimits) -> None:
        """Go on with other limits; counts in progress are kept, so that a change cannot hide a first sample."""
        self.high_n, self.low_n = limits.ceiling_n, limits.floor_n
        self._rows = (
            (2, limits.rail_low_n, limits.rail_high_n, 1, Reaction.OVERLOAD),
            (2, -limits.hard_n, limits.hard_n, 1, Reaction.OVERLOAD),
            (1, -INFINITE, limits.working_n, 2, Reaction.STOP),
            (3, -INFINITE, limits.fixture_n, 2, Reaction.STOP),
            (4, -INFINITE, limits.specimen_n, 2, Reaction.STOP),
            (0, -INFINITE, limits.method_n, 2, Reaction.STOP),
            (5, limits.wrong_sign_n, INFINITE, 2, Reaction.STOP),
        )

    def inside(self) -> None:
        """A sample inside [low_n, high_n] after one that was not: the lone outlier is counted."""
        self.outside.clear()
        self.outliers += 1

    def next_passes(self, gross_n: float, beyond: int) -> int | None:
        """The row that `judge` would find passed by this number after so many more that lie beyond; changes nothing."""
        for place, (row, low_n, high_n, samples, _) in enumerate(self._rows):
            if not low_n <= gross_n <= high_n and self.outside.get(place, 0) + beyond + 1 >= samples:
                return row
        return None

    def judge(self, gross_n: float) -> Trip | None:
        """One sample that is not inside [low_n, high_n]; the gravest row that is passed, or None."""
        if gross_n != gross_n:
            return Trip(15, gross_n, self.high_n, "N", Reaction.SIGNAL_LOST, "force is not a number")
        passed = None
        for place, (row, low_n, high_n, samples, reaction) in enumerate(self._rows):
            if low_n <= gross_n <= high_n:
                self.outside.pop(place, None)
                continue
            self.outside[place] = count = self.outside.get(place, 0) + 1
            if count >= samples and passed is None:
                passed = Trip(row, gross_n, high_n if gross_n > high_n else low_n, "N", reaction)
        return passed
