"""Slips of a frame card: kN for N, g for kg, mN per count, mm/s for mm/min, mm for um, a sign used twice."""

from __future__ import annotations

import math
from collections.abc import Iterator

from daq.cards.derived import force_channel, value_of
from daq.cards.frame import Cell, Compliance, Fixture, FrameCard, Motion
from daq.cards.slips import Slip

STANDARD_GRAVITY_M_S2 = 9.80665
# All bounds of this file are judgement of the trade: wide enough that a common bench is never asked.
CAPACITY_N_MIN, CAPACITY_N_MAX = 5.0, 5e6
REACH_MAX = 20.0  # converter range over cell capacity
SPAN_MM_MIN, SPAN_MM_MAX = 5.0, 2000.0
STIFFNESS_N_MM_MIN, STIFFNESS_N_MM_MAX = 500.0, 2e6
DRIVE_MM_MIN_MIN, APPROACH_MM_MIN_MIN, APPROACH_MM_MIN_MAX = 1.0, 0.1, 300.0
ZERO_SHARE_MAX, WEIGHT_TOLERANCE = 0.01, 0.2
NOISE_SHARE_MAX = 0.01
LAG_RATIO_MAX = 3.0


def frame_slips(frame: FrameCard) -> Iterator[Slip]:
    """Every value of a frame card that looks like a slip."""
    yield from _cell_slips(frame.cell)
    yield from _force_channel_slips(frame)
    yield from _zero_slips(frame)
    for fixture in frame.fixtures:
        yield from _fixture_slips(fixture, frame.cell)
    if frame.motion is not None:
        yield from _motion_slips(frame.motion)
    if frame.compliance is not None:
        yield from _compliance_slips(frame.compliance)


def _cell_slips(cell: Cell) -> Iterator[Slip]:
    if not CAPACITY_N_MIN <= cell.capacity_n <= CAPACITY_N_MAX:
        factor, unit = (1e3, "kN") if cell.capacity_n < CAPACITY_N_MIN else (1e-3, "mN")
        do = f"if it is in {unit}, it is {cell.capacity_n * factor:g} N"
        yield Slip(
            "cell.capacity_n", f"{cell.capacity_n:g}", "an unusual capacity for a flexure bench", do, True
        )
    if cell.noise_quiet_n is not None and cell.noise_quiet_n > NOISE_SHARE_MAX * cell.capacity_n:
        text = f"noise above {100 * NOISE_SHARE_MAX:g} % of the capacity"
        do = f"if it is in mN, it is {cell.noise_quiet_n / 1e3:g} N"
        yield Slip("cell.noise_quiet_n", f"{cell.noise_quiet_n:g}", text, do)
    if cell.uncertainty_percent < 0.01:
        do = f"if it is a fraction, it is {100.0 * cell.uncertainty_percent:g} %"
        yield Slip(
            "cell.uncertainty_percent", f"{cell.uncertainty_percent:g}", "better than any load cell", do
        )
    if cell.time_constant_s and cell.bandwidth_hz is not None:
        ratio = 2.0 * math.pi * cell.bandwidth_hz * cell.time_constant_s
        if not 1.0 / LAG_RATIO_MAX <= ratio <= LAG_RATIO_MAX:
            lag_s = 1.0 / (2.0 * math.pi * cell.bandwidth_hz)
            text = f"a first-order chain of {cell.bandwidth_hz:g} Hz has {lag_s:.3g} s"
            do = "correct time_constant_s (in seconds) or bandwidth_hz (in hertz)"
            yield Slip("cell.time_constant_s", f"{cell.time_constant_s:g}", text, do)
    if cell.moving_mass_kg is not None and cell.moving_mass_kg > 200.0:
        do = f"if it is in g, it is {cell.moving_mass_kg / 1e3:g} kg"
        yield Slip("cell.moving_mass_kg", f"{cell.moving_mass_kg:g}", "a very heavy load train", do)


def _force_channel_slips(frame: FrameCard) -> Iterator[Slip]:
    channel, capacity_n = force_channel(frame), frame.cell.capacity_n
    key = f"channels[{channel.name}].scale"
    if channel.scale < 0.0 and channel.sign < 0:
        text = "the channel is turned round twice, by scale and by sign"
        yield Slip(
            key,
            f"{channel.scale:g}",
            text,
            "compression of the bar must read positive: push by hand and look",
        )
    if channel.counts_min is None or channel.counts_max is None:
        return
    reach_n = max(value_of(channel, channel.counts_min), value_of(channel, channel.counts_max))
    if reach_n > REACH_MAX * capacity_n:
        text = f"the converter would reach {reach_n:g} N on a cell of {capacity_n:g} N"
        do = f"if it is in mN per count, it is {channel.scale / 1e3:g} N per count"
        yield Slip(key, f"{channel.scale:g}", text, do, True)


def _zero_slips(frame: FrameCard) -> Iterator[Slip]:
    """The clean fixture weighs on a cell under the supports (+), or hangs from one on the crosshead (-)."""
    cell, zero_n = frame.cell, frame.cell.zero_balance_n
    masses = {fixture.mass_on_cell_kg for fixture in frame.fixtures}
    if zero_n == 0.0 or len(masses) != 1:
        return
    sense = 1.0 if cell.position == "supports" else -1.0
    weight_n = sense * masses.pop() * STANDARD_GRAVITY_M_S2
    room_n = max(ZERO_SHARE_MAX * cell.capacity_n, WEIGHT_TOLERANCE * abs(weight_n))
    if abs(zero_n - weight_n) <= room_n and not (zero_n * weight_n < 0.0 and abs(weight_n) > 0.5):
        return
    text = f"the fixture on the cell weighs {weight_n:+.3g} N in the sense of this card"
    if abs(zero_n + weight_n) <= room_n:
        do = "is the sign of the force channel right? push by hand and look"
    else:
        do = "read the gross force of the clean fixture again; look for a forgotten piece or a strained cell"
    yield Slip("cell.zero_balance_n", f"{zero_n:g}", text, do)


def _fixture_slips(fixture: Fixture, cell: Cell) -> Iterator[Slip]:
    at, span = f"fixtures[{fixture.name}]", fixture.support_span_mm
    if not SPAN_MM_MIN <= span <= SPAN_MM_MAX:
        options = f"in m it is {span * 1e3:g} mm, in inch {span * 25.4:g} mm, in cm {span * 10.0:g} mm"
        do = f"if it is {options}" if span < SPAN_MM_MIN else f"if it is in um, it is {span / 1e3:g} mm"
        yield Slip(f"{at}.support_span_mm", f"{span:g}", "an unusual span", do)
    if fixture.mass_on_cell_kg * STANDARD_GRAVITY_M_S2 > 0.5 * cell.capacity_n:
        do = f"if it is in g, it is {fixture.mass_on_cell_kg / 1e3:g} kg"
        text = "the fixture alone takes more than half of the cell's capacity"
        yield Slip(f"{at}.mass_on_cell_kg", f"{fixture.mass_on_cell_kg:g}", text, do, True)
    if fixture.rating_n < CAPACITY_N_MIN:
        do = f"if it is in kN, it is {fixture.rating_n * 1e3:g} N"
        yield Slip(f"{at}.rating_n", f"{fixture.rating_n:g}", "a very weak fixture", do, True)


def _motion_slips(motion: Motion) -> Iterator[Slip]:
    if motion.speed_mm_min_max < DRIVE_MM_MIN_MIN:
        do = f"if it is in mm/s, it is {60.0 * motion.speed_mm_min_max:g} mm/min"
        yield Slip("motion.speed_mm_min_max", f"{motion.speed_mm_min_max:g}", "a very slow drive", do)
    approach = motion.approach_mm_min
    if approach < APPROACH_MM_MIN_MIN:
        do = f"if it is in mm/s, it is {60.0 * approach:g} mm/min"
        yield Slip("motion.approach_mm_min", f"{approach:g}", "a very slow approach", do)
    if approach > APPROACH_MM_MIN_MAX:
        do = f"if it is in um/s, it is {0.06 * approach:g} mm/min"
        yield Slip("motion.approach_mm_min", f"{approach:g}", "a dangerously fast approach", do, True)
    if motion.travel_mm_max <= 0.0 or motion.travel_mm_min >= 0.0:
        key = "travel_mm_max" if motion.travel_mm_max <= 0.0 else "travel_mm_min"
        text = "the position 0 lies outside the travel"
        do = "check the signs: towards the specimen is positive when position_sign is 1"
        yield Slip(f"motion.{key}", f"{getattr(motion, key):g}", text, do)


def _compliance_slips(table: Compliance) -> Iterator[Slip]:
    first, last = table.points[0], table.points[-1]
    stiffness = 1e3 * (last.force_n - first.force_n) / (last.deflection_um - first.deflection_um)
    if STIFFNESS_N_MM_MIN <= stiffness <= STIFFNESS_N_MM_MAX:
        return
    shown = f"{last.deflection_um:g}"
    if stiffness > STIFFNESS_N_MM_MAX:
        do = f"if it is in mm, it is {1e3 * last.deflection_um:g} um"
    else:
        do = f"if it is in nm, it is {last.deflection_um / 1e3:g} um"
    key = f"compliance.points[#{len(table.points)}].deflection_um"
    yield Slip(key, shown, f"a frame of {stiffness / 1e3:.3g} kN/mm is unusual", do, True)
