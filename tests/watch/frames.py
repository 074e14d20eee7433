"""Cards for the tests of the watch: the bench of the acceptance scenarios, at any sample rate."""

from __future__ import annotations

import json
from typing import Any

from daq.cards.frame import FrameCard
from daq.cards.method import MethodCard
from daq.watch.requests import OpenRun

FORCE_STEP_N = 0.016
POSITION_STEP_MM = 1e-4


def frame(
    *,
    rate_hz: float = 1000.0,
    capacity_n: float = 1000.0,
    silence_s: float | None = None,
    simulated: bool = True,
    motion: bool = True,
    position: bool = True,
    inputs: tuple[str, ...] = (),
    **changes: Any,
) -> FrameCard:
    """A frame with one packet link: force at 16 mN a count, position at 0.1 um a count."""
    channels = [
        {
            "name": "force",
            "link": "main",
            "role": "force",
            "unit": "N",
            "field": "force",
            "scale": FORCE_STEP_N,
            "counts_min": -120_000,
            "counts_max": 120_000,
        }
    ]
    if position:
        channels.append(
            {
                "name": "position",
                "link": "main",
                "role": "position",
                "unit": "mm",
                "field": "position",
                "scale": POSITION_STEP_MM,
            }
        )
    fields = [{"name": "force", "number": "int32"}, {"name": "position", "number": "int32"}]
    card: dict[str, Any] = {
        "card": "frame",
        "name": "bench-a",
        "simulated": simulated,
        "cell": {
            "serial": "C-1",
            "capacity_n": capacity_n,
            "verified_min_n": capacity_n / 100,
            "verified_max_n": capacity_n,
            "position": "crosshead",
            "time_constant_s": 0.0,
            "noise_quiet_n": 0.15,
        },
        "links": [
            {
                "name": "main",
                "kind": "tcp",
                "rate_hz": rate_hz,
                "dialect": "packets",
                "packets": {"sync": "a55a", "fields": fields},
                **({"silence_s": silence_s} if silence_s is not None else {}),
            }
        ],
        "channels": channels,
        "inputs": [{"name": name, "source": "modem", "line": "cts"} for name in inputs],
        "fixtures": [
            {
                "name": "quarter",
                "geometry": "4-point",
                "support_span_mm": 40.0,
                "load_span_mm": 20.0,
                "rating_n": 5000.0,
            }
        ],
    }
    if motion:
        card["motion"] = {
            "link": "main",
            "speed_mm_min_min": 0.01,
            "speed_mm_min_max": 100.0,
            "stop_latency_s": 0.15,
            "blocked_stiffness_n_mm": 10_000.0,
            "start": {"send": "GO {speed_mm_min}"},
            "stop": {"send": "STOP"},
        }
    _merge(card, changes)
    return FrameCard.model_validate_json(json.dumps(card))


def method(**changes: Any) -> MethodCard:
    """Alumina bars 4 x 3 on 40/20 at 0.5 mm/min: about 460 N after 16 s."""
    card: dict[str, Any] = {
        "card": "method",
        "name": "alumina",
        "geometry": "4-point-quarter",
        "section": "rectangle",
        "support_span_mm": 40.0,
        "load_span_mm": 20.0,
        "rate": {"mode": "crosshead", "speed_mm_min": 0.5},
        "expected": {"strength_mpa": 383.0, "weibull_modulus": 12.0, "modulus_gpa": 380.0},
    }
    _merge(card, changes)
    return MethodCard.model_validate_json(json.dumps(card))


def open_run(
    card: MethodCard | None = None, *, number: str = "1", loading: int = 1, override: str = ""
) -> OpenRun:
    return OpenRun(
        run={
            "run_id": f"00000000-0000-4000-8000-{int(number):06d}{loading:06d}",
            "series": "tests",
            "specimen": number,
            "loading": loading,
            "operator": "A. Tester",
        },
        specimen={"number": number, "width_mm": [4.0, 4.0], "thickness_mm": [3.0, 3.0]},
        method=(card or method()).model_dump(mode="json"),
        fixture="quarter",
        tare_override_reason=override,
    )


def _merge(card: dict[str, Any], changes: dict[str, Any]) -> None:
    """A double underscore goes one level down; lists are replaced."""
    for key, value in changes.items():
        place, part = card, key.split("__")
        for step in part[:-1]:
            place = place[int(step)] if isinstance(place, list) else place.setdefault(step, {})
        place[part[-1]] = value
