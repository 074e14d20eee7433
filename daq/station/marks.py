"""Running marks: what stands while a daemon runs, so that the next one knows of an unclean end.

One lies with the data, its twin where the frame is known by name: a daemon with another data folder serves the same
machine, and must not take it for looked at.
"""

from __future__ import annotations

import os
from pathlib import Path

from daq.station.places import Places


class RunningMarks:
    """Both marks of one frame, set and cleared together."""

    def __init__(self, places: Places) -> None:
        self._places = places

    def stand(self) -> bool:
        """Whether either is there: the last end was unclean."""
        return self._places.running_mark.exists() or self._places.frame_mark.exists()

    def where_else(self) -> str:
        """A line where the unclean end was that of a daemon with another data folder; "" otherwise."""
        try:
            other = Path(self._places.frame_mark.read_text(encoding="utf-8").strip())
        except (OSError, ValueError):
            return ""
        if other in (Path("."), self._places.data):
            return ""
        return (
            f"the last daemon of {self._places.frame} did not end in order; its data folder was {other}: what it had"
            f" recorded there is sealed by `midspan serve` with --data {other}"
        )

    def set(self) -> str:
        """Set both. A line where only the one beside the data could be; an OSError where not even that."""
        self._places.running_mark.write_text(f"{os.getpid()}\n", encoding="ascii")
        twin = self._places.frame_mark
        try:
            twin.parent.mkdir(mode=0o700, parents=True, exist_ok=True)
            twin.write_text(f"{self._places.data}\n", encoding="utf-8")
        except OSError as error:
            return (
                f"mark {twin} cannot be written ({error.strerror}): an unclean end will be known to a start with the"
                " same --data only; set XDG_STATE_HOME to a folder of your own"
            )
        return ""

    def clear(self) -> None:
        self._places.running_mark.unlink(missing_ok=True)
        self._places.frame_mark.unlink(missing_ok=True)
