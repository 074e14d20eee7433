"""python -m benchmarks --out bench-out [--quick] [--only NAME]: runs them, prints one table, writes bench.json.

No figure is judged here and no time is asserted: goals stand beside the figures for people to compare.
"""

from __future__ import annotations

import argparse
import importlib
import json
from pathlib import Path

from benchmarks.harness import Report, line_of, processor_ticks, shares_since

NAMES = (
    "startup",
    "decoding",
    "watching",
    "fracture",
    "response",
    "stops",
    "footprint",
    "recording",
    "window",
    "series",
    "recomputing",
)


def main() -> None:
    parser = argparse.ArgumentParser(prog="python -m benchmarks", description=__doc__)
    parser.add_argument("--out", type=Path, default=Path("bench-out"), help="folder for bench.json")
    parser.add_argument("--quick", action="store_true", help="about two minutes in all; wider quantiles")
    parser.add_argument("--only", action="append", choices=NAMES, help="run only this one; may be repeated")
    words = parser.parse_args()
    report = Report(words.quick)
    words.out.mkdir(parents=True, exist_ok=True)
    for name in words.only or NAMES:
        module = importlib.import_module(f"benchmarks.{name}")
        print(f"{name}: {(module.__doc__ or '').splitlines()[0]}", flush=True)
        before = processor_ticks()
        module.run(report)
        report.machine[name] = shares_since(before)
        (words.out / "bench.json").write_text(json.dumps(report.as_json(), indent=1) + "\n", encoding="utf-8")
    table(report)
    print(f"\nwritten: {words.out / 'bench.json'}")


def table(report: Report) -> None:
    """Everything once more, in one piece."""
    print("\n" + "=" * 100)
    for name in dict.fromkeys(figure.benchmark for figure in report.figures):
        shares = report.machine[name]
        print(
            f"\n{name}   [machine meanwhile: idle {shares.idle:.0f} %, steal {shares.steal:.1f} %, "
            f"user {shares.user:.0f} %, system {shares.system:.0f} %]"
        )
        for figure in report.figures:
            if figure.benchmark == name:
                print("  " + line_of(figure))


if __name__ == "__main__":
    main()
