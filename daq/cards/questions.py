"""Questions about a card or a bar that is possible but looks like a slip: asked, never converted.

Factor 10, 25.4, 60, 1000, swapped width and thickness, sign, scatter of readings. Judges values that loaded
without a fault; corrects none of them.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass

from daq.cards.derived import geometry_of, mean_mm
from daq.cards.frame import FrameCard
from daq.cards.method import MethodCard
from daq.cards.questions_frame import frame_slips
from daq.cards.questions_method import method_slips
from daq.cards.series import SeriesCard, Specimen
from daq.cards.slips import Slip, unit_slip

# Spread of the readings of one side above which it is measured again (judgement of the trade).
SPREAD_MM_MIN = 0.02
SPREAD_SHARE = 0.005
CHAMFER_SHARE_MAX = 0.1


@dataclass(frozen=True, slots=True)
class Question:
    """One thing to look at. must_correct: refused until corrected; otherwise a person may confirm it."""

    file: str
    key: str
    value: str
    text: str
    suggestion: str
    must_correct: bool = False

    @property
    def line(self) -> str:
        """One line for people."""
        return f"{self.file}: {self.key} = {self.value}: {self.text}: {self.suggestion}"


def questions(
    frame: FrameCard,
    method: MethodCard,
    specimens: Iterable[Specimen] = (),
    *,
    fixture: str | None = None,
    series: SeriesCard | None = None,
) -> tuple[Question, ...]:
    """Everything that should be looked at before the first bar is broken."""
    found = [_question(f"frame card {frame.name}", slip) for slip in frame_slips(frame)]
    found += [_question(f"method card {method.name}", slip) for slip in method_slips(frame, method, fixture)]
    found += [_question("bench sheet", slip) for bar in specimens for slip in specimen_slips(bar, method)]
    if series is not None:
        found += [_question(f"series card {series.name}", slip) for slip in series_slips(series)]
    return tuple(found)


def _question(file: str, slip: Slip) -> Question:
    return Question(file, slip.key, slip.value, slip.text, slip.suggestion, slip.must_correct)


def specimen_slips(bar: Specimen, method: MethodCard) -> Iterator[Slip]:
    """Readings of one bar against the method: unit, swapped sides, scatter, tolerance, chamfer, length."""
    yield from _count_slips(bar, method)
    sides = _sides(bar, method)
    if _swapped(bar, method):
        width, thickness = mean_mm(bar.width_mm), mean_mm(bar.thickness_mm)
        text = f"width {width:.4g} mm and thickness {thickness:.4g} mm look swapped"
        do = f"thickness is the side in the loading direction, nominal {method.thickness_mm:g} mm"
        yield Slip(f"{bar.number} width_mm", f"{width:.4g}", text, do, must_correct=True)
        sides = {}
    for key, (readings, nominal_mm) in sides.items():
        slips = tuple(_unit_slips(f"{bar.number} {key}", readings, nominal_mm, method))
        yield from slips
        if not slips:
            yield from _scatter_slips(f"{bar.number} {key}", readings, nominal_mm, method)
    yield from _chamfer_slips(bar)
    yield from _length_slips(bar, method)


def _sides(bar: Specimen, method: MethodCard) -> dict[str, tuple[tuple[float, ...], float]]:
    """Readings and nominal size of each side, where the method states one."""
    nominal = {"width_mm": method.width_mm, "thickness_mm": method.thickness_mm}
    if method.section != "rectangle":
        nominal = {"thickness_mm": method.diameter_mm}
    readings = {"width_mm": bar.width_mm, "thickness_mm": bar.thickness_mm}
    return {
        key: (readings[key], size)
        for key, size in nominal.items()
        if size is not None and len(readings[key]) > 0
    }


def _count_slips(bar: Specimen, method: MethodCard) -> Iterator[Slip]:
    wanted = {
        "thickness_mm": method.readings,
        "width_mm": method.readings if method.section == "rectangle" else 0,
    }
    for key, count in wanted.items():
        have = len(bar.width_mm if key == "width_mm" else bar.thickness_mm)
        if have != count:
            text = f"{have} readings where the method asks for {count}"
            yield Slip(f"{bar.number} {key}", f"{have} readings", text, "measure the bar", must_correct=True)


def _swapped(bar: Specimen, method: MethodCard) -> bool:
    """Wider side and thicker side stand the other way round than in the method."""
    width, thickness = method.width_mm, method.thickness_mm
    if method.section != "rectangle" or width is None or thickness is None or not bar.width_mm:
        return False
    share = method.dimension_tolerance_percent / 100.0
    if abs(width - thickness) <= share * max(width, thickness):
        return False
    as_width, as_thickness = mean_mm(bar.thickness_mm), mean_mm(bar.width_mm)
    return abs(as_width - width) <= share * width and abs(as_thickness - thickness) <= share * thickness


def _unit_slips(
    key: str, readings: tuple[float, ...], nominal_mm: float, method: MethodCard
) -> Iterator[Slip]:
    share = method.dimension_tolerance_percent / 100.0
    for number, value in enumerate(readings, start=1):
        slip = unit_slip(value, nominal_mm, share)
        if slip is not None:
            text = f"reading {number} is {slip.words} of nominal {nominal_mm:g} mm"
            do = f"if it was {slip.unit}, it is {value * slip.factor:.4g} mm: measure or type it again"
            yield Slip(key, f"{value:g}", text, do, must_correct=True)


def _scatter_slips(
    key: str, readings: tuple[float, ...], nominal_mm: float, method: MethodCard
) -> Iterator[Slip]:
    mean, spread = mean_mm(readings), max(readings) - min(readings)
    limit = max(SPREAD_MM_MIN, SPREAD_SHARE * mean)
    # Gauges show microns: a spread of exactly the limit must not fail by the last bit of a float.
    if spread > limit + 1e-9:
        shown = ", ".join(f"{value:g}" for value in readings)
        text = f"the readings scatter by {spread:.3g} mm, more than {limit:.3g} mm"
        yield Slip(key, shown, text, "measure again; confirm if the bar really varies")
    tolerance = method.dimension_tolerance_percent
    if abs(mean - nominal_mm) > tolerance / 100.0 * nominal_mm:
        off = 100.0 * (mean / nominal_mm - 1.0)
        text = f"{off:+.1f} % from nominal {nominal_mm:g} mm, allowed {tolerance:g} %"
        yield Slip(key, f"{mean:.4g}", text, "measure again; confirm if the bar is what it is")


def _chamfer_slips(bar: Specimen) -> Iterator[Slip]:
    smallest = min((*bar.width_mm, *bar.thickness_mm))
    if bar.chamfer_mm is not None and bar.chamfer_mm > CHAMFER_SHARE_MAX * smallest:
        text = f"more than a tenth of {smallest:g} mm"
        yield Slip(
            f"{bar.number} chamfer_mm",
            f"{bar.chamfer_mm:g}",
            text,
            "measure again; confirm if it is so large",
        )


def _length_slips(bar: Specimen, method: MethodCard) -> Iterator[Slip]:
    span_mm = geometry_of(method).support_mm
    if bar.length_mm is not None and bar.length_mm > 5.0 * span_mm:
        text = f"more than five times the support span of {span_mm:g} mm"
        do = f"if a decimal point is missing, it is {bar.length_mm / 10.0:g} mm"
        yield Slip(f"{bar.number} length_mm", f"{bar.length_mm:g}", text, do)


def series_slips(card: SeriesCard) -> Iterator[Slip]:
    """Temperature and humidity in another unit."""
    warm = card.temperature_c
    if warm is not None and 250.0 <= warm <= 320.0:
        do = f"if it is in kelvin, it is {warm - 273.15:.1f} degC"
        yield Slip("temperature_c", f"{warm:g}", "very warm for a bench", do)
    elif warm is not None and 50.0 <= warm <= 110.0:
        do = f"if it is in degrees Fahrenheit, it is {(warm - 32.0) / 1.8:.1f} degC"
        yield Slip("temperature_c", f"{warm:g}", "very warm for a bench", do)
    damp = card.humidity_percent
    if damp is not None and 0.0 < damp <= 1.0:
        do = f"if it is a fraction, it is {100.0 * damp:g} %"
        yield Slip("humidity_percent", f"{damp:g}", "very dry for a room", do)
