"""The floor in Python: select, os.read, two rows in a row above the limit, os.write; alone in its process.

    python -m benchmarks.bare DEVICE LIMIT_COUNTS

It decides on the same bytes as the bench process and asks for the same scheduling class, and does nothing else: no
check of the row, no clock, no units, no states, no record.
"""

from __future__ import annotations

import os
import select
import sys

from daq.bench.schedule import hurry, quiet_collector


def serve(device: int, limit_counts: int) -> None:
    """Until the other end hangs up."""
    tail, outside = b"", 0
    while True:
        select.select([device], [], [])
        data = os.read(device, 65_536)
        if not data:
            return
        lines = (tail + data).split(b"\n")
        tail = lines.pop()
        for line in lines:
            fields = line.split(b",")
            if len(fields) < 3:
                continue
            outside = outside + 1 if int(fields[1]) > limit_counts else 0
            if outside == 2:
                os.write(device, b"S\r\n")


if __name__ == "__main__":
    hurry()
    quiet_collector()
    try:
        serve(os.open(sys.argv[1], os.O_RDWR | os.O_NOCTTY | os.O_NONBLOCK), int(sys.argv[2]))
    except OSError:
        pass  # the instrument has gone
