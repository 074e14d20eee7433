"""Lane: cards and the very small machine of the benchmarks.

The cards are the shipped demo lane at another rate, with a method so slow that a bar takes minutes: the state LOADING
has to last as long as a benchmark. Crosshead, a straight spring, noise; no bar that breaks: what shall happen to the
force is scripted by the benchmark.
"""

from __future__ import annotations

import random
import tempfile
import tomllib
from dataclasses import dataclass, field
from pathlib import Path

from daq.cards.frame import FrameCard
from daq.cards.load import LoadedSeries, example_path, load_series
from daq.watch.expected import expect

FORCE_SCALE_N, POSITION_SCALE_MM = 0.016, 0.000_01
FIXTURE = "quarter-40-20"
GAP_MM, ZERO_N, NOISE_N = 0.15, 2.4, 0.15
METHOD_N_MAX, OVER_N = 600.0, 650.0
SPEED_MM_MIN = 0.02  # about 1.1 N/s: 450 N, below the method's limit, after six minutes
BAUD = {1_000: 460_800, 5_000: 2_000_000, 10_000: 4_000_000}


def frame_card(rate_hz: float, port: str, *, counter: bool = True) -> FrameCard:
    """The demo lane at that rate on that port."""
    card = tomllib.loads(example_path("kiln-lane-demo.toml").read_text("utf-8"))
    link = card["links"][0]
    link["rate_hz"], link["port"] = float(rate_hz), port
    link["speed_baud"] = next((baud for rate, baud in BAUD.items() if rate >= rate_hz), 4_000_000)
    if not counter:
        del link["lines"]["counter_column"], link["lines"]["counter_modulus"]
    for channel in card["channels"]:
        if channel["role"] == "position":
            channel["scale"] = POSITION_SCALE_MM
            channel["counts_min"], channel["counts_max"] = -5e6, 5e6
    card["name"] = "bench-lane"
    card["motion"]["speed_mm_min_min"] = 0.001
    card["motion"]["gap_mm"] = GAP_MM
    return FrameCard.model_validate(card, strict=False)


def write_series(folder: Path, *, speed_mm_min: float = SPEED_MM_MIN) -> Path:
    """Series, method and sheet files: the demo's, but slow, and with a limit of its own that events can pass."""
    method = example_path("alumina-demo.toml").read_text("utf-8")
    method = method.replace("speed_mm_min = 2.0", f"speed_mm_min = {speed_mm_min}")
    method = method.replace("run_s_max = 60.0", f"run_s_max = 1200.0\nforce_n_max = {METHOD_N_MAX}")
    (folder / "alumina-demo.toml").write_text(method, encoding="utf-8")
    for name in ("demo-series.toml", "demo-series.csv"):
        (folder / name).write_text(example_path(name).read_text("utf-8"), encoding="utf-8")
    return folder / "demo-series.toml"


def slow_series(*, speed_mm_min: float = SPEED_MM_MIN) -> LoadedSeries:
    """The same, loaded."""
    with tempfile.TemporaryDirectory() as folder:
        return load_series(write_series(Path(folder), speed_mm_min=speed_mm_min))


def stiffness_n_mm(frame: FrameCard, series: LoadedSeries) -> float:
    """What the plan expects, so that nothing looks wrong to the watch."""
    fixture = next(each for each in frame.fixtures if each.name == FIXTURE)
    return expect(series.method, series.specimens[0], fixture, frame.compliance, None).stiffness_n_mm


@dataclass(slots=True)
class Lane:
    """Crosshead and spring. advance one row at a time; hear the bytes that the bench sends."""

    rate_hz: float
    stiffness_n_mm: float
    dice: random.Random = field(default_factory=lambda: random.Random(1))
    at_mm: float = 0.0
    speed_mm_s: float = 0.0
    broken: bool = False
    deaf: bool = False  # events go on: the crosshead runs on, since the bench is armed again
    _rest: bytes = b""

    def row(self) -> tuple[float, float]:
        """Force in N and position in mm; moves on by one period."""
        into_mm = self.at_mm - GAP_MM
        force_n = ZERO_N + self.dice.gauss(0.0, NOISE_N)
        if into_mm > 0.0 and not self.broken:
            force_n += into_mm * self.stiffness_n_mm
        at_mm = self.at_mm
        self.at_mm += self.speed_mm_s / self.rate_hz
        return force_n, at_mm

    def row_again(self) -> tuple[float, float]:
        """Another look at the same moment, for a second stream."""
        at_mm, speed_mm_s = self.at_mm, self.speed_mm_s
        self.speed_mm_s = 0.0
        found = self.row()
        self.at_mm, self.speed_mm_s = at_mm, speed_mm_s
        return found

    def hear(self, data: bytes) -> tuple[list[bytes], int]:
        """(replies, how many STOPs came)."""
        lines = (self._rest + data).replace(b"\r", b"\n").split(b"\n")
        self._rest = lines.pop()
        replies, stops = [], 0
        for line in lines:
            if line == b"S":
                stops += 1
                self.speed_mm_s *= self.deaf
                replies.append(b"OK S\r\n")
            elif line.startswith(b"V"):
                self.speed_mm_s = float(line[1:]) / 60.0
                replies.append(b"OK V\r\n")
            elif line == b"K":
                replies.append(b"OK K\r\n")
            elif line == b"?":
                replies.append(b"ST=RM\r\n" if self.speed_mm_s else b"ST=R\r\n")
        return replies, stops


def row_bytes(counter: int, force_n: float, at_mm: float) -> bytes:
    """One row as the card declares it."""
    text = b"D%d,%d,%d" % (counter % 65_536, round(force_n / FORCE_SCALE_N), round(at_mm / POSITION_SCALE_MM))
    return text + b",%02X\r\n" % (sum(text) & 0xFF)
