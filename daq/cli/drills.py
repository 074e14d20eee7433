"""The two guided proofs of a real frame: polarity and stop drill. They move the frame through the running daemon only,
so that its limits, its stop line and its stopper stand behind every movement. Plain questions and answers.

The daemon writes the proof for the card that it serves, and knows it at once; a change of card or version voids it.
"""

from __future__ import annotations

import json
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from typing import Any

import click

from daq.cards.frame import FrameCard
from daq.cli.options import running_places
from daq.errors import MidspanError
from daq.station.client import Client
from daq.station.stopline import stop_frame
from monitor.presenter import GRAVE
from monitor.wording import fault_text

PUSH_PERCENT = 0.5  # of capacity: a hand's push that is clearly not noise
JOG_MM = 0.5
JOG_MM_MIN = 5.0
JOG_OFF_SHARE_MAX = 0.1
STEADY_S = 0.5
WAIT_S = 30.0
DRILL_S = 1.5
STOP_S_MAX = 0.3  # trade judgement, no source


class Bench:
    """A drill's view of the served frame: the newest numbers and events, and the stop behind every movement."""

    def __init__(self, client: Client, frame: FrameCard) -> None:
        self.client = client
        self.name = frame.name
        self.capacity_n = frame.cell.capacity_n

    def steady(self, key: str) -> float:
        """Mean of a summary value over half a second."""
        values: list[float] = []
        until_s = time.monotonic() + STEADY_S
        while time.monotonic() < until_s or not values:
            values += self.newest(key)
            if time.monotonic() > until_s + WAIT_S:
                raise MidspanError(f"the frame sends no {key}")
        return sum(values) / len(values)

    def extreme(self, key: str, rest: float, enough: float) -> float:
        """The value furthest from rest, until it is far enough off or the time is over."""
        far = rest
        until_s = time.monotonic() + WAIT_S
        while time.monotonic() < until_s and abs(far - rest) < enough:
            for value in self.newest(key):
                far = value if abs(value - rest) > abs(far - rest) else far
        return far

    def newest(self, key: str) -> list[float]:
        updates = self.client.updates(0.1)
        found = [u.body.get(key) for u in updates if u.kind == "summary"]
        return [float(value) for value in found if value is not None]

    def event(self, *names: str, timeout_s: float, to: str = "") -> Mapping[str, Any]:
        """The next event of one of these names (and, of a state, to that word). A fault ends the drill.

        Stops the frame when it does not come.
        """
        until_s = time.monotonic() + timeout_s
        while time.monotonic() < until_s:
            for event in self._events():
                if event["event"] in names and event.get("to", to) == to:
                    return event
                if event["severity"] in GRAVE:
                    raise MidspanError(f"the drill ended: {fault_text(event)}; nothing was recorded")
        self.stop()
        raise MidspanError(f"waited {timeout_s:.0f} s for {names[0]}: stopped; look at the frame, then reset")

    def wait(self, seconds: float) -> None:
        """Let it go on; whatever ends the movement meanwhile ends the drill."""
        until_s = time.monotonic() + seconds
        while time.monotonic() < until_s:
            for event in self._events():
                if event["event"] in ("stop_sent", "arrived") or event["severity"] in GRAVE:
                    raise MidspanError(
                        f"the movement ended by itself ({event['event']}): nothing was recorded"
                    )

    def _events(self) -> list[Mapping[str, Any]]:
        return [update.body for update in self.client.updates(0.05) if update.kind == "event"]

    def stop(self) -> None:
        why = stop_frame(self.name, "drill")
        if why:
            raise MidspanError(f"NO STOP: {why} - USE THE EMERGENCY STOP AT THE MACHINE")


def polarity(frame: FrameCard) -> None:
    """Push by hand: force must rise. Jog: displacement must follow with the declared sign."""
    with seated(frame) as bench:
        found = {"pushed_n": pushed(bench)}
        if frame.motion is not None:
            bench.client.do("prove", kind="pushed")
            try:
                found["moved_mm"] = jogged(bench, frame.motion.position_sign)
            except MidspanError:
                bench.client.do("prove", kind="")  # back to what the file says
                raise
        record(bench, "polarity", found)


def cell_weight(frame: FrameCard, weight_n: float) -> None:
    """After an overload: the zero of the bare cell, then a known weight. The bench judges both; nothing moves."""
    with seated(frame) as bench:
        confirm("Everything off the cell, as at its last zero?")
        time.sleep(STEADY_S * 3)
        bench.client.do("check_cell", weight_n=0.0)
        confirm(f"Now {weight_n:g} N hang on the cell and stand still?")
        time.sleep(STEADY_S * 3)
        bench.client.do("check_cell", weight_n=weight_n)
        click.echo(f"zero and {weight_n:g} N are right: the cell is free again")


def pushed(bench: Bench) -> float:
    rest_n = bench.steady("gross_n")
    push_n = bench.capacity_n * PUSH_PERCENT / 100.0
    click.echo(
        f"At rest: {rest_n:.2f} N. Push the loading roller by hand as the bar would, with {push_n:.1f} N or more"
        f" ({WAIT_S:.0f} s)."
    )
    pushed_n = bench.extreme("gross_n", rest_n, push_n) - rest_n
    click.echo(f"Seen: {pushed_n:+.2f} N")
    if abs(pushed_n) < push_n:
        raise MidspanError(f"no push of {push_n:.1f} N was felt: nothing was recorded; try again")
    if pushed_n < 0:
        raise MidspanError(
            "the force has the wrong sign: correct `sign` of the force channel, restart, try again"
        )
    return pushed_n


def jogged(bench: Bench, position_sign: int) -> float:
    confirm(f"Hands away, no bar mounted. Move {JOG_MM} mm towards the specimen and back?")
    before_mm = bench.steady("position_mm")
    patience_s = 60.0 * JOG_MM / JOG_MM_MIN + WAIT_S
    bench.client.do("jog", distance_mm=JOG_MM, speed_mm_min=JOG_MM_MIN)
    bench.event("state", to="at rest", timeout_s=patience_s)  # at its place, or at something in the way
    moved_mm = bench.steady("position_mm") - before_mm
    click.echo(f"Moved: {moved_mm:+.3f} mm")
    if abs(moved_mm * position_sign - JOG_MM) > JOG_OFF_SHARE_MAX * JOG_MM:
        raise MidspanError(
            f"displacement does not follow the {JOG_MM} mm asked for: something in the way, or sign, scale or unit of"
            " the position channel wrong; nothing was recorded"
        )
    bench.client.do("return", distance_mm=JOG_MM, speed_mm_min=JOG_MM_MIN)
    bench.event("state", to="at rest", timeout_s=patience_s)
    return moved_mm


def stop_drill(frame: FrameCard) -> None:
    """Move away from the specimen and stop through the stop line; the bench measures run-on and time to standstill."""
    if frame.motion is None:
        raise MidspanError(f"frame {frame.name} is monitor only; there is nothing to stop")
    speed = min(
        max(frame.motion.approach_mm_min, frame.motion.speed_mm_min_min), frame.motion.speed_mm_min_max
    )
    with seated(frame) as bench:
        confirm(
            f"Fixture clear. Move away from the specimen at {speed:g} mm/min and stop after {DRILL_S:g} s?"
        )
        bench.client.do("return", distance_mm=speed / 60.0 * DRILL_S * 3.0, speed_mm_min=speed)
        bench.wait(DRILL_S)
        bench.stop()
        found = bench.event("stopped", "stop_failed", timeout_s=WAIT_S)
        judge_stop(found)
        bench.client.do("reset")
        record(bench, "stop_drill", {key: found[key] for key in ("after_s", "run_on_mm", "verified")})


def judge_stop(found: Mapping[str, Any]) -> None:
    if found["event"] == "stop_failed":
        raise MidspanError("the frame went on moving after STOP: see to the drive before anything else")
    if not found["verified"] or found["run_on_mm"] is None:
        why = found.get("why") or "no position is known"
        raise MidspanError(f"the standstill was not seen ({why}): the stop cannot be proven on this frame")
    click.echo(f"Stood still after {found['after_s']:.3f} s, run-on {abs(found['run_on_mm']) * 1e3:.1f} um")
    if found["after_s"] > STOP_S_MAX:
        raise MidspanError(
            f"the stop took {found['after_s']:.2f} s, at most {STOP_S_MAX} s is allowed: see to the drive; reset with"
            " `midspan run`"
        )


@contextmanager
def seated(frame: FrameCard) -> Iterator[Bench]:
    """The operator's seat at the frame that serves this very card; free again whatever happens."""
    with Client(running_places(frame.name)) as client:
        served = client.look()["frame"]
        if served != json.loads(frame.model_dump_json()):
            raise MidspanError(
                f"frame {frame.name} is served with another card than this one: restart midspan serve with it first"
            )
        client.sit(click.prompt("Your name"))
        try:
            yield Bench(client, frame)
        finally:
            client.rise()


def confirm(question: str) -> None:
    if not click.confirm(question, default=False):
        raise MidspanError("not confirmed: nothing was moved, nothing was recorded")


def record(bench: Bench, kind: str, found: Mapping[str, Any]) -> None:
    proven = bench.client.do("prove", kind=kind, found=dict(found))["proven"]
    missing = [name.replace("_", " ") for name, done in proven.items() if not done]
    ahead = f"still to do: {', '.join(missing)}" if missing else "runs may start"
    click.echo(f"{kind.replace('_', ' ')} recorded for this card and version; {ahead}")
