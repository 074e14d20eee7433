"""The stop line: one datagram to the bench process's own stop socket. Standard library only; starts in no time.

It never passes through the station, so that it works while the station hangs. It is not a safety function: the
hard-wired emergency stop is.
"""

from __future__ import annotations

import json
import os
import socket
from pathlib import Path

ANSWER_TIMEOUT_S = 0.5
NO_ANSWER = "no answer from the bench process"


def runtime_root() -> Path:
    """Where the frames' runtime folders stand; must agree with daq.station.places."""
    base = os.environ.get("MIDSPAN_RUNTIME") or os.environ.get("XDG_RUNTIME_DIR")
    return Path(base) / "midspan" if base else Path(f"/dev/shm/midspan-{os.getuid()}")


def running_frames() -> list[str]:
    """Frames with a stop socket in this user's runtime folder."""
    return sorted(path.parent.name for path in runtime_root().glob("*/stop"))


def send_stop(frame: str, who: str) -> bool:
    """Send STOP; True when the bench process answered that the bytes have left."""
    return not stop_frame(frame, who)


def stop_frame(frame: str, who: str) -> str:
    """Send STOP; empty when its bytes have left, else why they have not."""
    line = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
    try:
        line.bind("")  # a name of the kernel's own choosing: no file that could be in the way of a STOP
        line.settimeout(ANSWER_TIMEOUT_S)
        line.sendto(who.encode(), str(runtime_root() / frame / "stop"))
        answer = json.loads(line.recv(4096))
        return "" if answer["ok"] else str(answer["why"])
    except (OSError, ValueError, KeyError):
        return NO_ANSWER
    finally:
        line.close()
