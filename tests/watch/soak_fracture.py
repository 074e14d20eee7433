"""Soak of the fracture watch: python -m tests.watch.soak_fracture [bars]. Prints failures and 95 % upper bounds.

Each record goes through the whole Pipeline, cut into blocks at random; the truth is the record's own. A *miss* is a
break without a stop in time, an *early stop* any stop but the one at the touch before the break, a *wrong word* a
break called a lost signal or the other way round.
"""

from __future__ import annotations

import sys
import time
from collections import defaultdict
from dataclasses import dataclass

import numpy as np

from daq.stream.block import Block
from daq.watch.pipeline import Pipeline, Proven
from daq.watch.requests import StartRun
from daq.watch.values import Event, State
from tests.watch.frames import frame, method, open_run
from tests.watch.records import CAPACITY_N, RATES_HZ, STRATA, Case, Record, draw, make

LOSSES = ("frozen", "zero", "nan", "rail")


@dataclass
class Outcome:
    case: Case
    failure: str
    delay_s: float
    verdict: str
    events: list[Event]
    seed: int = 0

    def count(self, name: str) -> int:
        return sum(event.name == name for event in self.events)


def pipeline_for(case: Case) -> Pipeline:
    card = frame(
        rate_hz=case.rate_hz,
        capacity_n=CAPACITY_N,
        position=False,
        inputs=("moving",),
        cell__noise_quiet_n=case.sigma_n,
        cell__time_constant_s=case.lag_s
        if case.lag_declared and case.lag_s
        else (0.0 if case.lag_declared else None),
        channels__0__scale=case.step_n,
        motion__travel_mm_max=500.0,
        motion__gap_mm=50.0,
    )
    return Pipeline(card, clean_start=True, proven=Proven(True, True))


def speed_mm_min(case: Case) -> float:
    """The speed whose planned rate is the record's: 4 x 3 alumina on 40/20 in series with 10 kN/mm."""
    bar = 12 * 380e3 * (4 * 27 / 12) / (10**2 * (120 - 40))
    return 60.0 * case.peak_n / case.ramp_s / (bar * 10_000.0 / (bar + 10_000.0))


def run(case: Case) -> Outcome:
    record = make(case)
    pipe = pipeline_for(case)
    rng = np.random.default_rng([case.seed, 7])
    pipe.inputs({"moving": False}, 0.0)
    # the record cannot wait for a second look at the drift, so the zero is taken at once, with a reason
    opening = open_run(method(rate__speed_mm_min=round(speed_mm_min(case), 6)), override="open loop")
    largest = max(2, round(case.rate_hz * 0.05))
    stops: list[tuple[float, str]] = []
    events: list[Event] = []
    started, place = False, 0
    while place < len(record.times_s):
        count = int(rng.integers(1, largest + 1))
        part = slice(place, min(place + count, len(record.times_s)))
        rows = record.counts[part].reshape(-1, 1).copy()
        step = pipe.advance(
            Block(0, place, record.times_s[part].copy(), rows), float(record.times_s[part][-1])
        )
        if place == 0:
            pipe.request(opening, float(record.times_s[part][-1]))
        place = part.stop
        events += step.events
        stops += [(e.time_s, str(e.fields["reason"])) for e in step.events if e.name == "stop_sent"]
        if not started and pipe.state is State.READY:
            step = pipe.request(StartRun(), float(record.times_s[part][-1]))
            events += step.events
            started = True
        if pipe.run is None and started:
            break
    return judge(record, stops, events)


def judge(record: Record, stops: list[tuple[float, str]], events: list[Event]) -> Outcome:
    case = record.case
    real = [(at, why) for at, why in stops if why != "touch"]
    verdict = next((str(e.fields["verdict"]) for e in events if e.name == "run_closed"), "never closed")
    if not any(e.name == "state" and e.fields["to"] == "loading" for e in events):
        return Outcome(case, "never came to loading", float("nan"), verdict, events)
    if not real:
        return Outcome(case, "miss", float("nan"), verdict, events)
    at, why = real[0]
    delay = at - record.break_s
    if delay < -0.5 / case.rate_hz:
        return Outcome(case, f"early stop {-delay:.3f} s before: {why}", delay, verdict, events)
    if delay > allowed_s(case):
        return Outcome(case, f"late by {delay:.3f} s: {why}", delay, verdict, events)
    broke = any(e.name == "fracture" for e in events)
    if (case.end in LOSSES) == broke:
        return Outcome(case, f"wrong word: {verdict} after {why}", delay, verdict, events)
    if not broke and "signal lost" not in verdict:
        return Outcome(case, f"wrong word: {verdict} after {why}", delay, verdict, events)
    return Outcome(case, "", delay, verdict, events)


def allowed_s(case: Case) -> float:
    """The latest stop that still counts as found."""
    period = 1.0 / case.rate_hz
    if case.end in LOSSES:
        # a short zero at a low rate may have shown two or three equal values by chance: then nine are waited for
        return max(0.1, (9.5 if case.end == "frozen" else 6.5) * period)
    if case.fall_tau_s:
        return max(1.2, 4.0 * case.fall_tau_s)
    lag = case.lag_s if case.lag_declared else 0.0
    ringing = 0.05 if case.ring_hz else 0.0
    undeclared = 0.0 if case.lag_declared else 1.2 * case.lag_s
    return max(0.015, 4.5 * period) + 3.0 * lag + ringing + undeclared + 3.0 * period


def cases(bars: int, seed: int = 0, *, brief: bool = False) -> list[Case]:
    """Bars spread evenly over strata and rates."""
    cells = [(s, r) for s in STRATA for r in RATES_HZ]
    return [draw(seed + n, *cells[n % len(cells)], brief=brief) for n in range(bars)]


def report(outcomes: list[Outcome], seconds: float) -> int:
    by: dict[str, list[Outcome]] = defaultdict(list)
    for outcome in outcomes:
        by[outcome.case.stratum].append(outcome)
        by[f"{outcome.case.rate_hz:g} S/s"].append(outcome)
    failed = [o for o in outcomes if o.failure]
    for outcome in failed[:50]:
        print(outcome.failure, "|", outcome.case.stratum, f"{outcome.case.rate_hz:g}", outcome.seed)  # noqa: T201
    for name, group in by.items():
        bad = sum(bool(o.failure) for o in group)
        delays = [o.delay_s for o in group if not o.failure]
        bound = upper_bound(bad, len(group))
        middle, most = (1e3 * float(np.median(delays)), 1e3 * max(delays)) if delays else (float("nan"),) * 2
        print(  # noqa: T201
            f"{name:12s} bars {len(group):6d} failed {bad:4d} (95 % upper bound {bound:.2e})"
            f" delay median {middle:7.1f} max {most:7.1f} ms"
        )
    print(f"{len(outcomes)} bars, {len(failed)} failed, {seconds:.0f} s")  # noqa: T201
    return len(failed)


def upper_bound(bad: int, bars: int) -> float:
    """95 % one-sided bound of a Poisson rate (exact for 0: 3.0/n), by bisection on the sum."""
    low, high = 0.0, 10.0 + 5.0 * bad
    for _ in range(60):
        mid = (low + high) / 2
        term = total = np.exp(-mid)
        for k in range(1, bad + 1):
            term *= mid / k
            total += term
        low, high = (mid, high) if total > 0.05 else (low, mid)
    return high / bars


def main(bars: int, *, seed: int = 0, brief: bool = False) -> int:
    begun = time.monotonic()
    outcomes = []
    for n, case in enumerate(cases(bars, seed, brief=brief)):
        outcome = run(case)
        outcome.seed = seed + n
        outcome.events = [e for e in outcome.events if e.name in ("glitch", "slip", "pop_in", "partial_drop")]
        outcomes.append(outcome)
        if n % 1000 == 999:
            print(f"{n + 1} bars", file=sys.stderr)  # noqa: T201
    return report(outcomes, time.monotonic() - begun)


if __name__ == "__main__":
    raise SystemExit(1 if main(int(sys.argv[1]) if len(sys.argv) > 1 else 30_000) else 0)
