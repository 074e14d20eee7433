"""Entries of made-up runs for tests: what a bench process would have put into the ring. No sockets, files
or clocks.
"""

from __future__ import annotations

import uuid
from collections.abc import Iterator
from typing import Any

import numpy as np

from daq.stream.block import Block
from daq.stream.entry import Entry, Kind
from daq.stream.payloads import pack_block, pack_event, pack_raw

FRAME: dict[str, Any] = {
    "card": "frame",
    "name": "bench-x",
    "title": "invented bench",
    "simulated": True,
    "links": [{"name": "main", "rate_hz": 1000.0}, {"name": "gauge", "rate_hz": 100.0}],
    "channels": [
        {
            "name": "load",
            "link": "main",
            "role": "force",
            "unit": "N",
            "scale": 0.0131,
            "offset": -3.7,
            "sign": -1,
        },
        {
            "name": "sag",
            "link": "gauge",
            "role": "deflection",
            "unit": "mm",
            "scale": 1e-5,
            "offset": 0.0,
            "sign": 1,
        },
        {
            "name": "crosshead",
            "link": "main",
            "role": "position",
            "unit": "mm",
            "scale": 1e-4,
            "counts_min": -5e5,
        },
    ],
}
METHOD: dict[str, Any] = {"card": "method", "name": "bars", "support_span_mm": 40.0, "title": "größer als µ"}


def specimen_card(number: str) -> dict[str, Any]:
    return {"number": number, "width_mm": [4.0, 4.01], "thickness_mm": [3.0, 2.99]}


class SyntheticBench:
    """Numbers entries like the bench: link 0 `main` (force, position), link 1 `gauge` (deflection)."""

    def __init__(
        self, *, stream_id: int = 0xA11, rate_hz: float = 1000.0, rows_per_block: int = 5, seed: int = 1
    ) -> None:
        self.stream_id = stream_id
        self.sequence = 0
        self.now_s = 0.25
        self.step_s = rows_per_block / rate_hz
        self._rows = rows_per_block
        self._period_s = 1.0 / rate_hz
        self._index = [17, 40_000]
        self._rng = np.random.default_rng(seed)

    def entry(self, kind: Kind, payload: bytes) -> Entry:
        self.sequence += 1
        return Entry(kind, self.stream_id, self.sequence, round((1000.0 + self.now_s) * 1e9), payload)

    def event(self, name: str, severity: str = "remark", **fields: Any) -> Entry:
        return self.entry(
            Kind.EVENT, pack_event({"event": name, "time_s": self.now_s, "severity": severity, **fields})
        )

    def step(self, *, gap_samples: int = 0, nan: bool = False) -> Iterator[Entry]:
        """One read of each link: RAW and the BLOCK decoded from it."""
        self._index[0] += max(gap_samples, 0)
        force = np.round(self._rng.normal(2000 * self.now_s, 9.0, self._rows))
        if nan:
            force[0] = np.nan
        position = np.round(1e4 * self.now_s + np.arange(self._rows))
        yield from self._read(0, np.column_stack((force, position)), gap_samples)
        yield from self._read(1, np.round(self._rng.normal(500 * self.now_s, 3.0, (1, 1))), 0)
        self.now_s += self.step_s

    def _read(self, link: int, counts: np.ndarray, gap_samples: int) -> Iterator[Entry]:
        rows = len(counts)
        time_s = self.now_s + self._period_s * np.arange(rows)
        text = "".join(",".join(f"{value:.0f}" for value in row) + "\r\n" for row in counts)
        yield self.entry(Kind.RAW, pack_raw(link, False, text.encode()))
        block = Block(
            link, self._index[link], time_s, np.asfortranarray(counts, dtype=np.float64), gap_samples
        )
        yield self.entry(Kind.BLOCK, pack_block(block))
        self._index[link] += rows

    def idle(self, steps: int) -> Iterator[Entry]:
        for _ in range(steps):
            yield from self.step()

    def opened(self, specimen: str, *, series: str = "kiln", loading: int = 1, run_id: str = "") -> Entry:
        run_id = run_id or str(
            uuid.uuid5(uuid.NAMESPACE_OID, f"{self.stream_id} {series} {specimen} {loading}")
        )
        names = {
            "run_id": run_id,
            "series": series,
            "specimen": specimen,
            "loading": loading,
            "operator": "Q. Tester",
        }
        return self.event(
            "run_opened",
            **names,
            fixture="blue",
            utc="2031-05-06T07:08:09.123Z",
            frame=FRAME,
            method=METHOD,
            specimen_card=specimen_card(specimen),
            run={**names, "temperature_c": 21.5},
        )

    def run(self, specimen: str, *, steps: int = 100, closed: bool = True, **names: Any) -> Iterator[Entry]:
        """A whole loading with a gap, an undecodable number and the usual events."""
        yield self.opened(specimen, **names)
        yield self.event("tared", tare_n=12.25, sigma_n=0.15)
        started = list(self._index)
        for number in range(steps):
            gap = {steps // 3: 4, steps // 2: -1}.get(number, 0)
            yield from self.step(gap_samples=gap, nan=number == steps // 4)
            if number == steps // 5:
                yield self.event("note", text="smells of burning — check")
        yield self.event(
            "fracture", "stop", verdict="sudden break", onset_s=self.now_s - 0.01, peak_raw_n=431.5
        )
        if closed:
            yield self._accounting(started, steps)
            yield self.event(
                "run_closed", run_id="", verdict="sudden break", reason="fracture", interrupted=False
            )

    def _accounting(self, started: list[int], steps: int) -> Entry:
        recorded = [steps * self._rows, steps]
        links = [{"received": rows + 2, "recorded": rows, "rejected": {"checksum": 2}} for rows in recorded]
        assert self._index[0] >= started[0] + recorded[0]
        return self.event("accounting", links=links)


def demo_entries(
    specimen: str = "A01", *, steps: int = 100, closed: bool = True, **bench: Any
) -> list[Entry]:
    """Some idle time and one run."""
    made = SyntheticBench(**bench)
    return [
        *made.idle(40),
        *made.run(specimen, steps=steps, closed=closed),
        *(made.idle(5) if closed else ()),
    ]


def demo_reduce(run: Any) -> dict[str, Any]:
    """A reduction that is short but uses columns, events and cards."""
    load = run.by_role("force")
    peak = float(np.nanmax(load.value)) if load.value.size else None
    trace = {"stress_mpa": load.value * 0.5, "strain": np.linspace(0.0, 1e-3, load.value.size)}
    return {"peak_n": peak, "rows": int(load.value.size), "events": len(run.events), "trace": trace}
