"""Small frame cards for the wire tests, and what a decoder made of a stream, in a form that can be
compared."""

from __future__ import annotations

import itertools
import json
from collections.abc import Iterable
from dataclasses import dataclass, field

import numpy as np

from daq.cards.frame import FrameCard

MOTION = {
    "link": "main",
    "speed_mm_min_min": 0.1,
    "speed_mm_min_max": 50.0,
    "start": {"send": "GO {speed_mm_min:+.3f}", "reply": "ok go"},
    "stop": {"send": "HALT", "reply": "ok halt"},
    "jog": {"send": "STEP {distance_mm:+.3f} {speed_mm_min:.3f}", "reply": "ok step"},
    "retreat": {"send": "BACK {speed_mm_min:.3f}", "reply": "ok back"},
    "keep_alive": {"send": "LIVE", "reply": "ok live"},
    "status": {"send": "?", "reply": "ST=", "letters_ignored": "R"},
}


def frame_of(link: dict, channels: list[dict], **more: object) -> FrameCard:
    """A frame card of one link; channels without a role become 'other', the first one 'force'."""
    base = {"link": "main", "unit": "", "role": "other"}
    first = {"role": "force", "unit": "N"}
    table = [{**base, **(first if not number else {}), **channel} for number, channel in enumerate(channels)]
    card = {
        "card": "frame",
        "name": "test-frame",
        "simulated": True,
        "cell": {
            "serial": "T-1",
            "capacity_n": 1000.0,
            "verified_min_n": 10.0,
            "verified_max_n": 1000.0,
            "position": "supports",
        },
        "links": [
            {"name": "main", "kind": "tcp", "host": "127.0.0.1", "tcp_port": 1, "rate_hz": 1000.0, **link}
        ],
        "channels": table,
        "fixtures": [
            {"name": "three-40", "geometry": "3-point", "support_span_mm": 40.0, "rating_n": 2000.0}
        ],
        **more,
    }
    return FrameCard.model_validate_json(json.dumps(card))


def lines_frame(lines: dict, channels: list[dict], *, link: dict | None = None, **more: object) -> FrameCard:
    return frame_of({"dialect": "lines", "lines": lines, **(link or {})}, channels, **more)


def packets_frame(
    packets: dict, channels: list[dict], *, link: dict | None = None, **more: object
) -> FrameCard:
    return frame_of({"dialect": "packets", "packets": packets, **(link or {})}, channels, **more)


@dataclass(eq=False)
class Yield:
    """Everything a decoder handed out, the cutting of the bytes taken away."""

    rows: list[tuple[int, tuple[float, ...]]] = field(default_factory=list)  # running index, counts
    gaps: list[tuple[int, int]] = field(
        default_factory=list
    )  # running index of the first row after, samples missing
    times: list[float] = field(default_factory=list)
    replies: list[bytes] = field(default_factory=list)
    inputs: list[tuple[str, bool]] = field(default_factory=list)
    discarded_bytes: int = 0
    rejected: dict[str, int] = field(default_factory=dict)
    buffered_bytes: int = 0

    def add(self, decoded) -> None:
        for block in decoded.blocks:
            if block.gap_samples:
                self.gaps.append((block.first_index, block.gap_samples))
            numbers = range(block.first_index, block.first_index + block.count)
            self.rows += list(zip(numbers, map(tuple, block.counts.tolist()), strict=True))
            self.times += block.time_s.tolist()
        self.replies += decoded.replies
        self.inputs += [(sample.name, sample.active) for sample in decoded.inputs]
        self.discarded_bytes += decoded.discarded_bytes
        for reason, count in decoded.rejected.items():
            self.rejected[str(reason)] = self.rejected.get(str(reason), 0) + count

    def same(self) -> tuple:
        """For ==: NaN made comparable, every other number by its bits."""
        indices = [index for index, _ in self.rows]
        counts = np.array([row for _, row in self.rows], dtype=np.float64)
        counts[np.isnan(counts)] = np.nan
        return (
            indices,
            counts.tobytes(),
            self.gaps,
            self.replies,
            self.inputs,
            self.discarded_bytes,
            self.rejected,
            self.buffered_bytes,
        )


def decode(decoder, pieces: Iterable[bytes], *, start_s: float = 10.0, step_s: float = 0.01) -> Yield:
    """Feed the pieces at regular arrivals."""
    result = Yield()
    for number, piece in enumerate(pieces):
        result.add(decoder.feed(piece, start_s + step_s * number))
    result.buffered_bytes = decoder.buffered_bytes
    assert np.all(np.diff(result.times) > 0)
    return result


def cut(data: bytes, places: Iterable[int]) -> list[bytes]:
    """data cut at these places."""
    edges = [0, *sorted(place % (len(data) + 1) for place in places), len(data)]
    return [data[start:stop] for start, stop in itertools.pairwise(edges)]
