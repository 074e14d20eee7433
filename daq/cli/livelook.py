"""A live look at a frame's links for `midspan check --live`: reads, sends nothing that could move it."""

from __future__ import annotations

import select
import time
from pathlib import Path

import numpy as np

from daq.cards.derived import channels_of, value_of
from daq.cards.frame import FrameCard
from daq.cards.frame import Link as LinkCard
from daq.results.quiet import QuietRecord, quiet_record
from daq.stream.block import Block
from drivers.links import open_link
from drivers.registry import decoder_for

RATE_SHARE = 0.05
HUM_SHARE = 3.0  # a line is named when it stands this far above the noise


def look_at_links(frame: FrameCard, seconds: float) -> list[str]:
    """One line a finding, link by link."""
    lines: list[str] = []
    for number, link in enumerate(frame.links):
        blocks, discarded, rejected = listen(frame, number, seconds)
        lines.append(
            f"link {link.name}: {sum(block.count for block in blocks)} rows, {discarded} bytes discarded, "
            f"{rejected} rows rejected in {seconds:g} s"
        )
        if blocks:
            lines += channel_lines(frame, number, blocks)
        else:
            lines.append(f"link {link.name}: NO ROWS - speed, wiring, dialect or start command wrong?")
    return lines


def listen(frame: FrameCard, number: int, seconds: float) -> tuple[list[Block], int, int]:
    """Blocks of one link for so many seconds."""
    link = open_link(frame.links[number])
    decoder = decoder_for(frame, number)
    poll = select.poll()
    poll.register(link.fileno(), select.POLLIN)
    blocks: list[Block] = []
    discarded = rejected = 0
    start_s = time.monotonic()
    try:
        while time.monotonic() - start_s < seconds:
            if poll.poll(100):
                data = link.read()
                if data:
                    decoded = decoder.feed(data, time.monotonic() - start_s)
                    blocks += decoded.blocks
                    discarded += decoded.discarded_bytes
                    rejected += sum(decoded.rejected.values())
    finally:
        link.close()
    return blocks, discarded, rejected


def channel_lines(frame: FrameCard, number: int, blocks: list[Block]) -> list[str]:
    time_s = np.concatenate([block.time_s for block in blocks])
    counts = np.concatenate([block.counts for block in blocks])
    lines = []
    for column, channel in enumerate(channels_of(frame, number)):
        values = np.array([value_of(channel, count) for count in counts[:, column].tolist()])
        try:
            quiet = quiet_record(time_s, values)
        except ValueError as error:
            lines.append(f"{channel.name}: {error}")
            continue
        lines.append(channel_line(channel.name, channel.unit, quiet))
        if channel.role == "force":
            lines += hum_lines(quiet)
            lines.append(rate_line(frame.links[number], quiet))
    return lines


def channel_line(name: str, unit: str, quiet: QuietRecord) -> str:
    return (
        f"{name}: mean {quiet.mean:.6g} {unit}, noise {quiet.sigma:.3g} {unit}, "
        f"drift {quiet.drift_per_min:.3g} {unit}/min, step {quiet.resolution:.3g} {unit}, "
        f"{quiet.distinct_values} different values"
    )


def rate_line(link: LinkCard, quiet: QuietRecord) -> str:
    off = abs(quiet.rate_hz / link.rate_hz - 1.0) > RATE_SHARE
    said = f"link {link.name}: {quiet.rate_hz:.1f} rows/s, card says {link.rate_hz:g}"
    return said + (" - NOT THE SAME" if off else "")


def hum_lines(quiet: QuietRecord) -> list[str]:
    floor = max(quiet.sigma, quiet.resolution)
    found = []
    for line in quiet.hum:
        if line.amplitude > HUM_SHARE * floor:
            shows = f", shows at {line.seen_hz:.1f} Hz" if line.aliased else ""
            found.append(f"hum of {line.true_hz:.0f} Hz{shows}: amplitude {line.amplitude:.3g} N")
    return found


def latency_timer_ms(link: LinkCard) -> int | None:
    """The USB adapter's latency timer; None where there is none to read."""
    if link.kind != "serial" or not link.port:
        return None
    name = Path(link.port).resolve().name
    setting = Path("/sys/bus/usb-serial/devices") / name / "latency_timer"
    try:
        return int(setting.read_text())
    except (OSError, ValueError):
        return None
