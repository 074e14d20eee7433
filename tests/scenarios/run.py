"""run_scenario(seed): one seeded scenario of the whole stack, played and judged.

`python -m tests.scenarios.run --seed 7` tells its story.

The real BenchCore on the virtual clock, the real bytes, misfortunes of the simulator and deeds of people. A seed that
fails is a bug with its own reproduction: it becomes a named test in test_seeds.py.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from hashlib import sha256

from daq.stream.entry import pack
from tests.scenarios.checks import stream_checks
from tests.scenarios.conduct import conduct_checks
from tests.scenarios.draw import Plan, draw
from tests.scenarios.play import Player, Said

QUIET = frozenset({"rejected"})


@dataclass(frozen=True, slots=True)
class Outcome:
    """complaints: what must not be; empty when all is well. digest: of all entries, byte for byte."""

    seed: int
    player: Player
    complaints: tuple[str, ...]
    digest: str


def run_scenario(seed: int) -> Outcome:
    """Draw, play, judge."""
    player = Player(draw(seed))
    player.play()
    complaints = (*stream_checks(player), *conduct_checks(player))
    digest = sha256(b"".join(pack(entry) for entry in player.bench.entries)).hexdigest()
    return Outcome(seed, player, complaints, digest)


# --- for people


def story(outcome: Outcome) -> Iterator[str]:
    """The scenario as lines of text, in the order of time."""
    yield from _heading(outcome.player.plan)
    player = outcome.player
    lines = [(event["time_s"], 1, "midspan", _event_words(event)) for event in player.bench.events]
    lines += [(t.time_s, 0, "machine", _truth_words(t.what, dict(t.fields))) for t in player.truths]
    lines += [
        (done.time_s, 2, "person", _deed_words(done.what, done.said, done.missing)) for done in player.done
    ]
    for time_s, _, who, words in sorted(lines, key=lambda line: line[:2]):
        yield f"{time_s:9.3f} s  {who:8s} {words}"
    yield f"{len(player.bench.entries)} entries, {player.bench.now_s:.1f} s, sha256 {outcome.digest[:16]}"
    yield from (f"COMPLAINT: {line}" for line in outcome.complaints)
    yield "all checks hold" if not outcome.complaints else f"{len(outcome.complaints)} complaints"


def _heading(plan: Plan) -> Iterator[str]:
    links = ", ".join(f"{link.name} {link.dialect} {link.rate_hz:g} S/s" for link in plan.frame.links)
    yield f"seed {plan.seed}: {plan.frame.name} ({links}), {plan.fixture}, {plan.method.rate.mode} rate"
    yield (
        f"  expected {plan.expected.load_p50_n:.0f} N after {plan.to_break_s:.1f} s, noise "
        f"{plan.frame.cell.noise_quiet_n:.2f} N, bench wakes every {1e3 * plan.wake_s:g} ms"
    )
    for fault in plan.card.faults:
        yield "  misfortune: " + ", ".join(
            f"{k} {v}" for k, v in fault.model_dump(exclude_defaults=True).items()
        )
    for act in plan.acts:
        yield f"  person: {act.deed.value}, {act.delay_s:.2f} s after '{act.moment.value}' ({act.value:g})"


def _event_words(event: dict[str, object]) -> str:
    left_out = ("event", "time_s", "severity", "frame", "method", "specimen_card", "run")
    fields = " ".join(f"{key}={_short(value)}" for key, value in event.items() if key not in left_out)
    mark = {"remark": " ", "caution": "!", "stop": "#", "emergency": "@"}[str(event["severity"])]
    return f"{mark} {event['event']} {fields}"


def _truth_words(what: str, fields: dict[str, object]) -> str:
    return f"  {what} " + " ".join(f"{key}={_short(value)}" for key, value in fields.items())


def _deed_words(what: str, said: Said, missing: Sequence[str]) -> str:
    answer = "" if said is Said.DONE else f": {said.value}"
    return f"  {what}{answer}" + (f" ({'; '.join(missing)})" if missing else "")


def _short(value: object) -> str:
    return f"{value:.5g}" if isinstance(value, float) else str(value)


def main(argv: Sequence[str] | None = None) -> int:
    parser = argparse.ArgumentParser(prog="tests.scenarios.run", description=__doc__)
    parser.add_argument("--seed", type=int, default=7, help="which scenario (default 7)")
    outcome = run_scenario(parser.parse_args(argv).seed)
    sys.stdout.write("\n".join(story(outcome)) + "\n")
    return 1 if outcome.complaints else 0


if __name__ == "__main__":
    raise SystemExit(main())
