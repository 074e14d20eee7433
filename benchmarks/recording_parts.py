"""The processes of benchmarks/recording.py, each a role:

    python -m benchmarks.recording_parts producer RING RATE SECONDS    entries of made rows into a ring, paced
    python -m benchmarks.recording_parts recorder RING JOURNAL         the real recorder
    python -m benchmarks.recording_parts archivist JOURNAL OUT real|none  the real archivist, with reduction or without

Every report of recorder and archivist is one JSON line on standard output; both end when standard input ends.
"""

from __future__ import annotations

import json
import select
import sys
import time
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from benchmarks import lane
from benchmarks.harness import NS, high_water_kb
from daq.stream.block import Block
from daq.stream.entry import Kind
from daq.stream.payloads import pack_block, pack_event, pack_raw
from daq.stream.ring import Ring, RingWriter, ring_bytes

WAKEUP_S = 0.001  # the bench process reads at most a thousand times a second above 1 kHz
ROW_BYTES = 26  # a packet of three channels, counter, sync and check, or a short text row
COLUMNS = 3
RING_SECONDS = 10.0
BEGIN_S = 0.5


def frame_json(rate_hz: float) -> dict[str, Any]:
    """The demo lane with a third channel."""
    card = lane.frame_card(rate_hz if rate_hz <= 200_000 else 200_000.0, "none").model_dump(mode="json")
    card["links"][0]["rate_hz"] = rate_hz
    sag = {**card["channels"][1], "name": "sag", "role": "deflection", "column": 4}
    card["channels"] = [*card["channels"], sag]
    return card


def opened_event(rate_hz: float) -> dict[str, Any]:
    names = {"run_id": "bench-run", "series": "bench", "specimen": "B1", "loading": 1, "operator": "nobody"}
    return {
        "event": "run_opened", "time_s": 0.0, "severity": "remark", **names, "fixture": lane.FIXTURE,
        "frame": frame_json(rate_hz), "method": {}, "specimen_card": {}, "run": names,
    }  # fmt: skip


def produce(path: Path, rate_hz: float, seconds: float) -> None:
    """Says once a second what the ring looks like: JSON lines."""
    per_row = ROW_BYTES + 8 * (1 + COLUMNS) + 200 / max(1.0, rate_hz * WAKEUP_S)
    ring = Ring.create(path, ring_bytes(rate_hz * per_row, RING_SECONDS), 7)
    sys.stdin.readline()  # begin when recorder and archivist stand
    now_ns = time.monotonic_ns()
    ring.append_batch([(Kind.EVENT, now_ns, pack_event(opened_event(rate_hz)))])
    rows = max(1, round(rate_hz * WAKEUP_S))
    period_s, dice = 1.0 / rate_hz, np.random.default_rng(1)
    noise = np.rint(dice.normal(20_000.0, 9.0, (256, rows, COLUMNS)))
    raw = pack_raw(0, False, dice.bytes(ROW_BYTES * rows))
    begin_ns, made, said_ns = time.monotonic_ns(), 0, 0
    while made < rate_hz * seconds:
        due_ns = begin_ns + int(made / rate_hz * NS)
        now_ns = time.monotonic_ns()
        if now_ns < due_ns:
            time.sleep((due_ns - now_ns) / NS)
        time_s = (made + np.arange(rows)) * period_s
        block = Block(0, made, time_s, noise[(made // rows) % 256] + made * period_s)
        ring.append_batch([(Kind.RAW, now_ns, raw), (Kind.BLOCK, now_ns, pack_block(block))])
        made += rows
        if now_ns - said_ns > NS // 4:
            said_ns = now_ns
            say(ring, made, due_ns, now_ns)
    say(ring, made, begin_ns + int(made / rate_hz * NS), time.monotonic_ns())
    sys.stdin.read()
    ring.close()


def say(ring: RingWriter, made: int, due_ns: int, now_ns: int) -> None:
    told = {
        "rows": made, "lag_bytes": ring.lag_bytes, "capacity": ring.capacity, "lost": ring.lost_entries,
        "sequence": ring.last_sequence, "late_s": (now_ns - due_ns) / NS,
    }  # fmt: skip
    sys.stdout.write(json.dumps(told) + "\n")
    sys.stdout.flush()


def report(told: Mapping[str, Any]) -> None:
    sys.stdout.write(json.dumps({"ns": time.monotonic_ns(), "hwm_kb": high_water_kb(), **told}) + "\n")
    sys.stdout.flush()


def over() -> bool:
    return bool(select.select([0], [], [], 0.0)[0])


def main(role: str, *words: str) -> None:
    if role == "producer":
        produce(Path(words[0]), float(words[1]), float(words[2]))
    elif role == "recorder":
        from daq.record.recorder import run_recorder

        run_recorder(Path(words[0]), Path(words[1]), report, over)
    else:
        from daq.record.archivist import run_archivist
        from daq.results.reduce import reduce

        def result_of(run: Any) -> Mapping[str, Any]:
            return reduce(run).as_json() if words[2] == "real" else {}

        journal, out = Path(words[0]), Path(words[1])
        run_archivist(journal, out, out / "spool", result_of, report, over)


if __name__ == "__main__":
    main(*sys.argv[1:])
