"""Rows in which nothing happens wait a few milliseconds and are judged together. Pure; decides when, reads no clock.

To decode, judge and record one row costs as much as ten together, and most of it is waking up. So while nothing is
under way and each row lies in the calm band that the watch gives, rows are kept back: for 5 ms or 10 rows. Above 2,000
rows a second they may wait for 1 ms at any time, as long as they lie inside the limits. A row outside the band, a
reply, an input that moved, a damaged row, a request or a tick ends the wait at once. What was kept back is then taken
as one read that came when its last bytes came.
"""

from __future__ import annotations

from daq.cards.frame import FrameCard
from drivers.decoded import ShowsRows

HOLD_S = 0.005
ROWS_MAX = 10
BRISK_S = 0.001
BRISK_HZ = (
    2_000.0  # common practice, no source: a wake-up each millisecond is what two processors carry with ease
)


class Holding:
    """The bytes of a frame's only link that wait. A frame of several links keeps nothing back: their order counts."""

    __slots__ = ("_column", "_data", "_ns", "_rows", "_rows_brisk", "_rows_max", "decoder")

    def __init__(self, frame: FrameCard, column: int) -> None:
        """column: of the force in a row."""
        rate_hz = frame.links[0].rate_hz if len(frame.links) == 1 else 0.0
        self._rows_max = min(int(HOLD_S * rate_hz), ROWS_MAX)
        self._rows_brisk = int(BRISK_S * rate_hz) if rate_hz > BRISK_HZ else 0
        self._column = column
        self.decoder: ShowsRows | None = None
        self._data: list[bytes] = []
        self._rows, self._ns = 0, 0

    @property
    def able(self) -> bool:
        """Rows come fast enough to be worth it, and can be looked at."""
        return self._rows_max > 1 and self.decoder is not None

    @property
    def waits(self) -> bool:
        return bool(self._data)

    def keeps(self, data: bytes, now_ns: int, band: tuple[float, float, bool]) -> bool:
        """Keep these bytes back? band: counts between which a force is no news, and whether all is calm."""
        low, high, calm = band
        rows_max = self._rows_max if calm else self._rows_brisk
        if self._rows + 1 >= rows_max or self.decoder is None:
            return False
        rows, column = self.decoder.peek(data), self._column
        if rows is None or self._rows + len(rows) >= rows_max:
            return False
        for row in rows:
            if not low <= row[column] <= high:
                return False
        self._data.append(data)
        self._rows, self._ns = self._rows + len(rows), now_ns
        return True

    def take(self) -> tuple[bytes, int]:
        """All that waited, and when its last bytes came."""
        data = b"".join(self._data)
        self._data.clear()
        self._rows = 0
        return data, self._ns
