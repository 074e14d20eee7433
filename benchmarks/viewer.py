"""A viewer for load: subscribes to a frame's feed and decodes every update, as a window would; draws nothing.

python -m benchmarks.viewer FRAME DATA
"""

from __future__ import annotations

import sys
from pathlib import Path

from daq.station.client import Client
from daq.station.places import places_for


def watch(frame: str, data: Path) -> None:
    """Until it is ended."""
    with Client(places_for(frame, data)) as client:
        rows = 0
        while True:
            for update in client.updates(1.0):
                rows += len(next(iter(update.columns.values()))) if update.columns else 0


if __name__ == "__main__":
    try:
        watch(sys.argv[1], Path(sys.argv[2]))
    except KeyboardInterrupt:
        pass
