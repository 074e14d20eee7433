"""A live look at a frame's links for `midspan check --live`: reads, sends nothing that could move it."""

from __future__ import annotations

import select
import time
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from daq.cards.derived import channels_of, link_bytes_per_row, value_of
from daq.cards.frame import FrameCard
from daq.cards.frame import Link as LinkCard
from daq.results.quiet import QuietRecord, quiet_record
from daq.stream.block import Block
from drivers.links import open_link
from drivers.registry import decoder_for

RATE_SHARE = 0.05
HUM_SHARE = 3.0  # a line is named when it stands this far above the noise


@dataclass(slots=True)
class Findings:
    """lines: what was seen. faults: why the frame cannot be served like this."""

    lines: list[str] = field(default_factory=list)
    faults: list[str] = field(default_factory=list)


def look_at_links(frame: FrameCard, seconds: float) -> Findings:
    """One line a finding, link by link."""
    found = Findings()
    for number, link in enumerate(frame.links):
        blocks, discarded, rejected = listen(frame, number, seconds)
        rows = sum(block.count for block in blocks)
        found.lines.append(
            f"link {link.name}: {rows} rows, {discarded} bytes discarded, {rejected} rows rejected in {seconds:g} s"
        )
        if blocks:
            look_at_channels(frame, number, blocks, found)
        elif discarded:
            found.faults.append(
                f"link {link.name}: bytes come, but no row: speed_baud, the dialect or its check is wrong in the card"
            )
        else:
            found.faults.append(
                f"link {link.name}: nothing comes: look at power, cable and the device's output setting"
            )
        if blocks and discarded > rows * link_bytes_per_row(link, frame):
            found.faults.append(
                f"link {link.name}: more bytes are thrown away than make rows: speed_baud, dialect or cable is wrong"
            )
        if rejected > rows:
            found.faults.append(
                f"link {link.name}: more rows are rejected than taken: look at cable and card"
            )
    return found


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


def look_at_channels(frame: FrameCard, number: int, blocks: list[Block], found: Findings) -> None:
    time_s = np.concatenate([block.time_s for block in blocks])
    counts = np.concatenate([block.counts for block in blocks])
    for column, channel in enumerate(channels_of(frame, number)):
        values = np.array([value_of(channel, count) for count in counts[:, column].tolist()])
        try:
            quiet = quiet_record(time_s, values)
        except ValueError as error:
            found.lines.append(f"{channel.name}: {error}")
            continue
        found.lines.append(channel_line(channel.name, channel.unit, quiet))
        if channel.role == "force":
            found.lines += hum_lines(quiet)
            look_at_rate(frame.links[number], quiet, found)


def channel_line(name: str, unit: str, quiet: QuietRecord) -> str:
    return (
        f"{name}: mean {quiet.mean:.6g} {unit}, noise {quiet.sigma:.3g} {unit}, "
        f"drift {quiet.drift_per_min:.3g} {unit}/min, step {quiet.resolution:.3g} {unit}, "
        f"{quiet.distinct_values} different values"
    )


def look_at_rate(link: LinkCard, quiet: QuietRecord, found: Findings) -> None:
    said = f"link {link.name}: {quiet.rate_hz:.1f} rows/s, card says {link.rate_hz:g}"
    found.lines.append(said)
    if abs(quiet.rate_hz / link.rate_hz - 1.0) > RATE_SHARE:
        found.faults.append(f"{said}: correct rate_hz or the device's setting")


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
