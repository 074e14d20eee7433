"""The long runs: python -m tests.soak --out soak-out [--bars 30000] [--kills 200] [--seeds 1000] [--series-bars 30].

Four parts, each left out with a 0: load records through the whole watch (equal thirds clean, one disturbance, combined;
10 to 10,000 S/s; peak over noise down to 100), SIGKILLs of real processes in real runs, the clean series of the
acceptance scenarios, and seeded scenarios of the whole stack. Prints every failure and, per stratum, the upper bound
of the failure rate at 95 % (Clopper-Pearson, one-sided: 3/n where nothing failed); writes OUT/soak.json.
"""

from __future__ import annotations

import argparse
import json
import multiprocessing
import os
import sys
import tempfile
import time
from collections import defaultdict
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from math import exp, lgamma, log, log1p
from pathlib import Path
from statistics import median
from typing import Any

from tests.watch.records import RATES_HZ, STRATA, Case, draw
from tests.watch.soak_fracture import run as run_record

SINGLE = tuple(stratum for stratum in STRATA if stratum not in ("clean", "combined"))
FIRST_SEED = 1_000_000  # none that the tests of every change have seen
CONFIDENCE = 0.95
CHUNK = 20
TOLD_S = 10.0
FAILURES_SHOWN = 50


@dataclass(slots=True)
class Tally:
    """How many of one kind were tried, and how many failed. delays_s: of those that did not fail."""

    tried: int = 0
    failed: int = 0
    delays_s: list[float] = field(default_factory=list)

    def as_json(self) -> dict[str, Any]:
        told: dict[str, Any] = {
            "tried": self.tried,
            "failed": self.failed,
            "upper_bound_95": upper_bound(self.failed, self.tried),
        }
        if self.delays_s:
            told |= {"delay_median_s": median(self.delays_s), "delay_max_s": max(self.delays_s)}
        return told


def upper_bound(failed: int, tried: int, confidence: float = CONFIDENCE) -> float:
    """Clopper-Pearson, one-sided: the rate at which so few failures would have a chance of 1 - confidence."""
    if failed >= tried:
        return 1.0
    low, high = failed / tried, 1.0
    for _ in range(100):
        middle = (low + high) / 2
        low, high = (middle, high) if _at_most(failed, tried, middle) > 1.0 - confidence else (low, middle)
    return high


def _at_most(failed: int, tried: int, rate: float) -> float:
    """Chance of that many failures or fewer."""
    return sum(
        exp(
            lgamma(tried + 1)
            - lgamma(k + 1)
            - lgamma(tried - k + 1)
            + (k * log(rate) if k else 0.0)
            + (tried - k) * log1p(-rate)
        )
        for k in range(failed + 1)
        if 0.0 < rate < 1.0
    )


# --- the parts


@dataclass(frozen=True, slots=True)
class Found:
    """What one piece of work found. groups: the tallies it belongs to; complaint: empty when all is well."""

    name: str
    groups: tuple[str, ...]
    complaint: str
    delay_s: float | None = None


def bar_case(number: int) -> Case:
    """Equal thirds; inside each every rate in turn, and every single disturbance at every rate."""
    third, place = number % 3, number // 3
    rate_hz = RATES_HZ[place % len(RATES_HZ)]
    single = SINGLE[(place // len(RATES_HZ)) % len(SINGLE)]
    return draw(FIRST_SEED + number, ("clean", single, "combined")[third], rate_hz)


def do_bar(number: int) -> Found:
    case = bar_case(number)
    outcome = run_record(case)
    third = ("clean", "one disturbance", "combined")[number % 3]
    groups = (third, f"{case.rate_hz:g} S/s", *([case.stratum] if third == "one disturbance" else []))
    name = f"bar {number} ({case.stratum}, {case.rate_hz:g} S/s)"
    # a gradual failure has no edge to count a delay from; the loss of a signal is another thing than a break
    edged = not case.fall_tau_s and case.end == "break"
    return Found(name, groups, outcome.failure, outcome.delay_s if edged and not outcome.failure else None)


def do_seed(seed: int) -> Found:
    from tests.scenarios.run import run_scenario

    outcome = run_scenario(seed)
    kinds = sorted(outcome.player.plan.kinds) or ["nothing wrong"]
    return Found(f"seed {seed}", ("seeds", *kinds), "; ".join(outcome.complaints))


def do_series(bars: int) -> Iterator[Found]:
    from tests.scenarios.test_job_scenarios import test_1_clean_alumina_series

    try:
        test_1_clean_alumina_series(bars)
    except AssertionError as error:
        yield Found("clean series", ("series",), str(error) or "failed")
    else:
        yield Found("clean series", ("series",), "")


def do_kills(kills: int) -> Iterator[Found]:
    from tests.processes.kills import ROUND, kill_round

    with tempfile.TemporaryDirectory() as folder:
        for number in range(-(-kills // ROUND)):
            for role, count, complaint in kill_round(
                Path(folder) / str(number), number, kills - number * ROUND
            ):
                for kill in range(count):
                    yield Found(f"round {number}, {role} killed", ("kills", role), "" if kill else complaint)


def over_all_cores(work: Callable[[int], Found], numbers: Sequence[int]) -> Iterator[Found]:
    """In processes that share nothing."""
    with multiprocessing.get_context("spawn").Pool(os.cpu_count()) as pool:
        yield from pool.imap_unordered(work, numbers, chunksize=CHUNK)


def tally(title: str, found: Iterator[Found], total: int) -> dict[str, Any]:
    """Count, show progress, print failures and the table of a part."""
    begun_s = told_s = time.monotonic()
    groups: dict[str, Tally] = defaultdict(Tally)
    failures: list[str] = []
    for done, one in enumerate(found, 1):
        for group in one.groups:
            groups[group].tried += 1
            groups[group].failed += bool(one.complaint)
            if one.delay_s is not None:
                groups[group].delays_s.append(one.delay_s)
        if one.complaint:
            failures.append(f"{one.name}: {one.complaint}")
            _say(f"FAILED {failures[-1]}") if len(failures) <= FAILURES_SHOWN else None
        if (now_s := time.monotonic()) - told_s > TOLD_S:
            told_s = now_s
            left_s = (now_s - begun_s) / done * (total - done)
            _say(f"{title}: {done} of {total}, {len(failures)} failed, about {left_s / 60:.0f} min left")
    seconds = time.monotonic() - begun_s
    _say(f"--- {title}: {len(failures)} failed, {seconds:.0f} s")
    order = ("clean", "one disturbance", "combined", *(f"{rate:g} S/s" for rate in RATES_HZ), *SINGLE)
    names = [name for name in order if name in groups] + sorted(groups.keys() - set(order))
    for name in names:
        _say(_row(name, groups[name]))
    told = {name: group.as_json() for name, group in groups.items()}
    return {"seconds": seconds, "failures": failures, "groups": told}


def _row(name: str, group: Tally) -> str:
    bound = upper_bound(group.failed, group.tried)
    row = f"{name:18s} tried {group.tried:6d}  failed {group.failed:4d}  95 % upper bound {bound:.2e}"
    if group.delays_s:
        middle, most = 1e3 * median(group.delays_s), 1e3 * max(group.delays_s)
        row += f"  delay median {middle:6.1f} ms, largest {most:6.1f} ms"
    return row


def _say(line: str) -> None:
    sys.stdout.write(line + "\n")
    sys.stdout.flush()


def main(argv: Sequence[str] | None = None) -> int:
    parser = argparse.ArgumentParser(
        prog="tests.soak", description="The long runs; each part is left out with a 0."
    )
    parser.add_argument("--out", type=Path, default=Path("soak-out"), help="folder for soak.json")
    parser.add_argument("--bars", type=int, default=30_000, help="load records through the watch")
    parser.add_argument("--kills", type=int, default=200, help="SIGKILLs of real processes")
    parser.add_argument("--seeds", type=int, default=1000, help="scenarios of the whole stack")
    parser.add_argument("--series-bars", type=int, default=30, help="bars of the clean series")
    asked = parser.parse_args(argv)
    parts: dict[str, tuple[int, Callable[[], Iterator[Found]]]] = {
        "bars": (asked.bars, lambda: over_all_cores(do_bar, range(asked.bars))),
        "kills": (asked.kills, lambda: do_kills(asked.kills)),
        "series": (asked.series_bars, lambda: do_series(asked.series_bars)),
        "seeds": (
            asked.seeds,
            lambda: over_all_cores(do_seed, range(FIRST_SEED, FIRST_SEED + asked.seeds)),
        ),
    }
    asked.out.mkdir(parents=True, exist_ok=True)
    told: dict[str, Any] = {
        "argv": vars(asked) | {"out": str(asked.out)},
        "cores": os.cpu_count(),
        "parts": {},
    }
    for name, (wanted, work) in parts.items():
        if wanted > 0:
            told["parts"][name] = tally(name, work(), 1 if name == "series" else wanted)
            (asked.out / "soak.json").write_text(json.dumps(told, indent=1) + "\n", encoding="utf-8")
    return 1 if any(part["failures"] for part in told["parts"].values()) else 0


if __name__ == "__main__":
    raise SystemExit(main())
