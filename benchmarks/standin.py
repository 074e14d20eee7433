"""A stand-in for the bench process in front of the real stopper: same imports, same locked memory, same beats.

    python -m benchmarks.standin STOPPER_FD LINK_FD DEADLINE_S

It hands over the link and the STOP bytes as the bench does, then beats every 20 ms until it is killed or frozen.
"""

from __future__ import annotations

import json
import socket
import sys
import time

from benchmarks.loaded import Loaded
from daq.bench import loop
from daq.bench.schedule import hurry, quiet_collector

BEAT_S = loop.STOPPER_BEAT_NS / 1e9


def main(stopper_fd: int, link_fd: int, deadline_s: float) -> None:
    stopper = socket.socket(fileno=stopper_fd)
    loaded = Loaded(1_000.0)  # card, decoder, core, watch: what the bench holds
    hurry()
    order = json.dumps({"deadline_s": deadline_s, "stop": b"\r\nS\r\nS\r\n".hex()}).encode()
    socket.send_fds(stopper, [order], [link_fd])
    quiet_collector()
    sys.stdout.write(json.dumps({"beating": loaded.rate_hz}) + "\n")
    sys.stdout.flush()
    while True:
        stopper.send(b".")
        time.sleep(BEAT_S)


if __name__ == "__main__":
    main(int(sys.argv[1]), int(sys.argv[2]), float(sys.argv[3]))
