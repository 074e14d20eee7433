"""How many bytes a frame's stream takes, so that the ring can be made deep enough. Pure arithmetic."""

from __future__ import annotations

from daq.cards.derived import channels_of, link_bytes_per_row
from daq.cards.frame import FrameCard

WAKEUPS_PER_S_MAX = 10_000  # above this reads coalesce by themselves: more rows to an entry
PAIR_OVERHEAD_BYTES = 2 * 48 + 40 + 8  # two entry headers with padding, block header, raw header
EVENTS_BYTES_PER_S = 20_000  # queries, keep-alives, replies and events of a lively second


def stream_bytes_per_s(frame: FrameCard) -> float:
    """Upper estimate of RAW + BLOCK + EVENT bytes per second over all links."""
    total = float(EVENTS_BYTES_PER_S)
    for number, link in enumerate(frame.links):
        columns = 1 + len(channels_of(frame, number))
        per_row = link_bytes_per_row(link, frame) + 8 * columns
        total += min(link.rate_hz, WAKEUPS_PER_S_MAX) * PAIR_OVERHEAD_BYTES + link.rate_hz * per_row
    return total
