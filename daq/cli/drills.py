"""The two guided proofs of a real frame: polarity and stop drill. They move the frame through the running daemon only,
so that its limits, its stop line and its stopper stand behind every movement. Plain questions and answers.
"""

from __future__ import annotations

import datetime as dt
import time
from pathlib import Path
from typing import Any

import click

from daq.cards.frame import FrameCard
from daq.cli.options import running_places
from daq.errors import MidspanError
from daq.station.client import Client
from daq.station.places import places_for
from daq.station.proofs import write_proof
from daq.station.stopline import send_stop

PUSH_PERCENT = 0.5  # of capacity: a hand's push that is clearly not noise
JOG_MM = 0.5
JOG_MM_MIN = 5.0
STEADY_S = 0.5
WAIT_S = 30.0
DRILL_S = 1.5
RUN_ON_S_MAX = 0.3  # job.md A6


def polarity(frame: FrameCard, data: Path) -> None:
    """Push up on the upper fixture: force must rise. Jog: displacement must follow with the declared sign."""
    with Client(running_places(frame.name)) as client:
        client.sit(click.prompt("Your name"))
        rest_n = steady(client, "gross_n")
        push_n = frame.cell.capacity_n * PUSH_PERCENT / 100.0
        click.echo(
            f"At rest: {rest_n:.2f} N. Now push the loading roller as the bar would (about {push_n:.1f} N), by hand."
        )
        pushed_n = extreme(client, "gross_n", rest_n, push_n) - rest_n
        click.echo(f"Seen: {pushed_n:+.2f} N")
        if pushed_n < push_n:
            raise MidspanError(
                "force sign is wrong or nothing was felt: check `sign` of the force channel, then again"
            )
        confirm(f"Hands away. Jog {JOG_MM} mm towards the specimen (no bar mounted)?")
        before_mm = steady(client, "position_mm")
        client.do("jog", distance_mm=JOG_MM, speed_mm_min=JOG_MM_MIN)
        time.sleep(60.0 * JOG_MM / JOG_MM_MIN + 1.0)
        moved_mm = steady(client, "position_mm") - before_mm
        sign = frame.motion.position_sign if frame.motion is not None else 1
        click.echo(f"Moved: {moved_mm:+.3f} mm")
        if abs(moved_mm * sign - JOG_MM) > 0.1 * JOG_MM:
            raise MidspanError(
                "displacement does not follow: check sign, scale and unit of the position channel, then again"
            )
        client.rise()
    record(frame, data, "polarity", {"pushed_n": pushed_n, "moved_mm": moved_mm})


def stop_drill(frame: FrameCard, data: Path) -> None:
    """Move without a bar and stop through the stop line; the bench measures run-on and time to standstill."""
    if frame.motion is None:
        raise MidspanError(f"frame {frame.name} is monitor only; there is nothing to stop")
    with Client(running_places(frame.name)) as client:
        client.sit(click.prompt("Your name"))
        speed = min(frame.motion.approach_mm_min, frame.motion.speed_mm_min_max)
        confirm(f"No bar mounted, fixture clear. Move at {speed:g} mm/min and stop after {DRILL_S:g} s?")
        client.do("jog", distance_mm=speed / 60.0 * DRILL_S * 3.0, speed_mm_min=speed)
        found = wait_stopped(client, frame.name)
        click.echo(f"Stood still after {found['after_s']:.3f} s, run-on {found['run_on_mm'] * 1e3:.1f} um")
        if not found["verified"]:
            raise MidspanError(
                "no displacement sensor saw the standstill: the stop cannot be proven on this frame"
            )
        if found["after_s"] > RUN_ON_S_MAX:
            raise MidspanError(
                f"stop took {found['after_s']:.2f} s, at most {RUN_ON_S_MAX} s is allowed: see to the drive"
            )
        client.do("reset")
        client.rise()
    record(frame, data, "stop_drill", found)


def wait_stopped(client: Client, frame: str) -> dict[str, Any]:
    """Let it move, stop it, and return what the bench's `stopped` event says."""
    until_s = time.monotonic() + DRILL_S
    sent = False
    while time.monotonic() < until_s + WAIT_S:
        for update in client.updates(0.05):
            if sent and update.kind == "event" and update.body["event"] == "stopped":
                return dict(update.body)
        if not sent and time.monotonic() > until_s:
            sent = True
            if not send_stop(frame, "stop drill"):
                raise MidspanError("NO ANSWER TO STOP - use the emergency stop at the machine")
    raise MidspanError("the frame was not seen to stand still - use the emergency stop at the machine")


def steady(client: Client, key: str) -> float:
    """Mean of a summary value over half a second."""
    values: list[float] = []
    until_s = time.monotonic() + STEADY_S
    while time.monotonic() < until_s or not values:
        values += [
            float(u.body[key])
            for u in client.updates(0.1)
            if u.kind == "summary" and u.body.get(key) is not None
        ]
        if time.monotonic() > until_s + WAIT_S:
            raise MidspanError(f"the frame sends no {key}")
    return sum(values) / len(values)


def extreme(client: Client, key: str, rest: float, enough: float) -> float:
    """The value furthest from rest until it is far enough off, or the time is over."""
    far = rest
    until_s = time.monotonic() + WAIT_S
    while time.monotonic() < until_s and abs(far - rest) < enough:
        for update in client.updates(0.1):
            if update.kind == "summary" and update.body.get(key) is not None:
                value = float(update.body[key])
                far = value if abs(value - rest) > abs(far - rest) else far
    return far


def confirm(question: str) -> None:
    if not click.confirm(question, default=False):
        raise MidspanError("not confirmed: nothing was moved, nothing was recorded")


def record(frame: FrameCard, data: Path, kind: str, found: dict[str, Any]) -> None:
    at = dt.datetime.now(dt.UTC).isoformat(timespec="seconds")
    write_proof(places_for(frame.name, data).proofs, frame, kind, {**found, "utc": at})
    click.echo(
        f"{kind.replace('_', ' ')} recorded for this card and version; start `midspan serve` again to use it"
    )
