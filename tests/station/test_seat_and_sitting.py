"""Seat and sitting: who may move the frame, which bar is next, and that no number is ever used twice."""

from __future__ import annotations

from importlib import resources
from pathlib import Path

import pytest

from daq.cards.load import load_series
from daq.errors import Refused
from daq.station.seat import Seat
from daq.station.sitting import BarState, Sealed, Sitting, Unsealed

TOKEN, OTHER = "a" * 32, "b" * 32


def demo_sitting(found: tuple[Sealed, ...] = ()) -> Sitting:
    with resources.as_file(resources.files("daq.cards") / "examples" / "demo-series.toml") as path:
        return Sitting(load_series(Path(path)), found)


def sealed(number: str, loading: int = 1, *, interrupted: bool = False, run_id: str = "r1") -> Sealed:
    return Sealed(number, loading, run_id, interrupted, f"{number}.h5", {"strength_mpa": 400.0})


def test_the_seat_is_one_persons() -> None:
    seat = Seat()
    seat.sit("Ines", TOKEN)
    with pytest.raises(Refused, match="taken by Ines"):
        seat.sit("Olaf", OTHER)
    with pytest.raises(Refused, match="Ines's"):
        seat.check("start", OTHER)
    seat.check("start", TOKEN)
    seat.rise(TOKEN)
    with pytest.raises(Refused, match="nobody sits"):
        seat.check("start", TOKEN)


def test_a_dead_terminals_seat_is_taken_over_by_name() -> None:
    seat = Seat()
    seat.sit("Ines", TOKEN)
    seat.sit("Olaf", OTHER, instead=True)
    with pytest.raises(Refused):
        seat.check("start", TOKEN)
    assert seat.operator == "Olaf"


@pytest.mark.parametrize("name", ["", "   ", "x" * 81, "a\nb"])
def test_a_seat_needs_a_printable_name(name: str) -> None:
    with pytest.raises(Refused, match="operator's name"):
        Seat().sit(name, TOKEN)


def test_bars_come_in_order_and_a_broken_one_never_again() -> None:
    sitting = demo_sitting()
    first, second = (bar.specimen.number for bar in sitting.bars[:2])
    assert sitting.next_number() == first
    assert sitting.open(first, "r1") == 1
    with pytest.raises(Refused, match="called already"):
        sitting.open(first, "r2")
    sitting.closed("r1", interrupted=False)
    sitting.sealed(sealed(first))
    assert sitting.next_number() == second
    with pytest.raises(Refused, match="broken already"):
        sitting.open(first, "r3")


def test_an_interrupted_bar_gets_a_new_loading_number() -> None:
    sitting = demo_sitting()
    number = sitting.bars[0].specimen.number
    sitting.open(number, "r1")
    sitting.closed("r1", interrupted=True)
    assert sitting.next_number() == number  # it lies on the rollers still, while its record is being sealed
    with pytest.raises(Refused, match="being sealed"):
        sitting.open(number, "r2")
    sitting.sealed(sealed(number, 1, interrupted=True))
    assert sitting.next_number() == number
    assert sitting.open(number, "r2") == 2


def test_a_loading_that_is_open_already_can_be_taken_up() -> None:
    """The station, or the operator's terminal, was away while the bench had a run open."""
    sitting = demo_sitting()
    first, second = (bar.specimen.number for bar in sitting.bars[:2])
    sitting.resume(first, 3, "r1")
    with pytest.raises(Refused, match="called already"):
        sitting.open(first, "r2")
    assert sitting.next_number() == second
    sitting.closed("r1", interrupted=True)
    sitting.sealed(sealed(first, 3, interrupted=True))
    assert sitting.next_number() == first and sitting.open(first, "r2") == 4


def test_why_there_is_no_next_bar_is_said() -> None:
    sitting = demo_sitting()
    numbers = [bar.specimen.number for bar in sitting.bars]
    for number in numbers[:-1]:
        sitting.sealed(sealed(number))
    sitting.open(numbers[-1], "r1")
    assert sitting.why_none() == f"bar {numbers[-1]} is called already"
    sitting.closed("r1", interrupted=False)
    assert "being sealed" in sitting.why_none()
    sitting.sealed(sealed(numbers[-1]))
    assert sitting.done and "every bar" in sitting.why_none()


def test_a_refused_opening_uses_its_number_up() -> None:
    sitting = demo_sitting()
    number = sitting.bars[0].specimen.number
    sitting.open(number, "r1")
    sitting.refused(number)
    assert sitting.open(number, "r2") == 2


def test_records_found_on_disk_count() -> None:
    first = demo_sitting().bars[0].specimen.number
    sitting = demo_sitting(
        (sealed(first, 2, run_id="r9"), sealed(first, 1, interrupted=True), sealed("FOREIGN"))
    )
    assert sitting.bar(first).state is BarState.BROKEN
    assert sitting.bar(first).loadings == 2
    with pytest.raises(Refused, match="not on the bench sheet"):
        sitting.open("FOREIGN", "r1")


def test_a_late_interrupted_report_does_not_mend_a_broken_bar() -> None:
    first = demo_sitting().bars[0].specimen.number
    sitting = demo_sitting((sealed(first, 1),))
    sitting.sealed(sealed(first, 2, interrupted=True))
    assert sitting.bar(first).state is BarState.BROKEN


def test_a_refused_opening_leaves_an_interrupted_bar_interrupted() -> None:
    first = demo_sitting().bars[0].specimen.number
    sitting = demo_sitting((sealed(first, 1, interrupted=True),))
    sitting.open(first, "r2")
    sitting.refused(first)
    bar = sitting.bar(first)
    assert bar.state is BarState.INTERRUPTED and bar.loadings == 2 and bar.record == f"{first}.h5"


def unsealed(number: str, *, closed: bool, interrupted: bool = False, loading: int = 1) -> Unsealed:
    series = demo_sitting().loaded.card.name
    return Unsealed("r1", series, number, loading, closed, interrupted)


def test_a_bar_whose_record_is_being_sealed_is_not_offered_again_by_a_station_that_was_away() -> None:
    sitting = demo_sitting()
    first, second = (bar.specimen.number for bar in sitting.bars[:2])
    sitting.unsealed(unsealed(first, closed=True))
    assert sitting.next_number() == second
    with pytest.raises(Refused, match="being sealed"):
        sitting.open(first, "r2")
    sitting.sealed(sealed(first))
    sitting.unsealed(unsealed(first, closed=True))  # an old word, come late
    assert sitting.bar(first).state is BarState.BROKEN


def test_a_run_that_is_open_at_the_bench_closes_as_the_archivist_tells() -> None:
    sitting = demo_sitting()
    first, second = (bar.specimen.number for bar in sitting.bars[:2])
    sitting.unsealed(unsealed(first, closed=False, interrupted=True))
    assert sitting.bar(first).state is BarState.OPEN and sitting.next_number() == second
    sitting.unsealed(unsealed(first, closed=True, interrupted=True))
    assert sitting.bar(first).state is BarState.SEALING and sitting.next_number() == first
    with pytest.raises(Refused, match="being sealed"):
        sitting.open(first, "r2")


def test_a_strange_or_known_run_changes_nothing() -> None:
    sitting = demo_sitting()
    first = sitting.bars[0].specimen.number
    sitting.unsealed(unsealed("FOREIGN", closed=True))
    sitting.open(first, "r1")
    sitting.unsealed(unsealed(first, closed=False))
    assert sitting.bar(first).state is BarState.OPEN and sitting.bar(first).loadings == 1
    sitting.closed("r1", interrupted=False)
    sitting.unsealed(unsealed(first, closed=False))  # said before the close was read
    assert sitting.bar(first).state is BarState.SEALING
