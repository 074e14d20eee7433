"""Room on the disk: enough for the journal at a start, and for ten of the longest runs before a bar is called.

Looks at the file system; writes nothing.
"""

from __future__ import annotations

import os
from pathlib import Path

from daq.bench.sizing import stream_bytes_per_s
from daq.cards.frame import FrameCard
from daq.errors import MidspanError
from daq.stream.journal import SEGMENT_BYTES

RUNS_MIN = 10
FREE_SHARE_MIN = 0.05  # common practice, no source: file systems slow down and fragment beyond
MODERATE_RUN_S = 60.0  # a bar breaks in 5 to 90 s
AHEAD_BYTES_MAX = 64 << 20
SEGMENTS_AT_START = 2  # the one in use and the next
MEGA = 1e6


def bytes_ahead(frame: FrameCard) -> int:
    """Room the recorder keeps filled with zeros, so that no run of moderate length meets a full disk."""
    return min(AHEAD_BYTES_MAX, int(stream_bytes_per_s(frame) * MODERATE_RUN_S))


def check_start(folder: Path, frame: FrameCard) -> None:
    """MidspanError where not even the journal would fit."""
    needed = SEGMENTS_AT_START * SEGMENT_BYTES + bytes_ahead(frame)
    free = free_bytes(folder)
    if free < needed:
        raise MidspanError(
            f"data folder {folder}: {free / MEGA:.0f} MB free, at least {needed / MEGA:.0f} MB are needed for the"
            " journal: make room, or name another folder with --data"
        )


def why_too_little(folder: Path, frame: FrameCard, run_s_max: float) -> str:
    """Why the next bar may not be called, with the arithmetic; "" where ten of the longest runs have room and the disk
    is not nearly full. run_s_max: of the method, s; 0 while no series is open.
    """
    facts = disk_facts(folder)
    free, total = facts.f_bavail * facts.f_frsize, facts.f_blocks * facts.f_frsize
    return judge(f"disk of {folder}", free, total, stream_bytes_per_s(frame), run_s_max)


def judge(disk: str, free: int, total: int, rate: float, run_s_max: float) -> str:
    """The rule itself. free, total: bytes; rate: of the stream, bytes/s."""
    run, share = rate * run_s_max, free / max(1, total)
    if free < RUNS_MIN * run:
        return (
            f"{disk}: {free / MEGA:.0f} MB free are {free / run:.1f} of the longest runs ({run_s_max:g} s at "
            f"{rate / 1e3:.0f} kB/s = {run / MEGA:.0f} MB), at least {RUNS_MIN} are wanted: make room"
        )
    if share < FREE_SHARE_MIN:
        return (
            f"{disk}: {free / MEGA:.0f} MB free are {100 * share:.1f} % of it, at least "
            f"{100 * FREE_SHARE_MIN:.0f} % are wanted: make room"
        )
    return ""


def free_bytes(folder: Path) -> int:
    """What an ordinary user may still write there."""
    facts = disk_facts(folder)
    return facts.f_bavail * facts.f_frsize


def disk_facts(folder: Path) -> os.statvfs_result:
    try:
        return os.statvfs(folder)
    except OSError as error:
        raise MidspanError(f"data folder {folder}: {error.strerror}: name another with --data") from error
