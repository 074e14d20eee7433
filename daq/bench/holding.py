"""Rows in which nothing happens wait a few milliseconds and are judged together. Pure; decides when, reads no clock.

To decode, judge and record one row costs as much as ten together, and most of it is waking up. So while nothing is
under way and each row lies in the calm band that the watch gives, rows are kept back: for 5 ms or 10 rows. Above 2,000
rows a second they may wait for 1 ms at any time, the first one beyond a limit included: the second one is what stops.
A drop, a reply, an input that moved, a damaged or missing row, a request or a tick ends the wait at once. What was kept
back is then taken as one read that came when its last bytes came.
"""

from __future__ import annotations

from daq.cards.frame import FrameCard
from daq.watch.setup import Column
from drivers.decoded import Peeks

HOLD_S = 0.005
ROWS_MAX = 10
BRISK_S = 0.001
BRISK_HZ = (
    2_000.0  # common practice, no source: a wake-up each millisecond is what two processors carry with ease
)


class Holding:
    """The bytes of a frame's only link that wait. A frame of several links keeps nothing back: their order counts."""

    __slots__ = ("_brisk", "_data", "_force", "_ns", "_rows", "_rows_max", "beyond", "decoder")

    def __init__(self, frame: FrameCard, force: Column) -> None:
        rate_hz = frame.links[0].rate_hz if len(frame.links) == 1 else 0.0
        self._rows_max = min(int(HOLD_S * rate_hz), ROWS_MAX)
        self._brisk = int(BRISK_S * rate_hz) if rate_hz > BRISK_HZ else 0
        self._force = force
        self.decoder: Peeks | None = None
        self._data: list[bytes] = []
        self._rows = self._ns = 0
        self.beyond = 0  # of the rows that wait, how many of the last lie beyond a limit

    @property
    def able(self) -> bool:
        """Rows come fast enough to be worth it, and can be looked at."""
        return self._rows_max > 1 and self.decoder is not None

    @property
    def waits(self) -> bool:
        return bool(self._data)

    def forces_n(self, data: bytes) -> list[float] | None:
        """Gross force of each row of these bytes, where they are nothing but rows that simply follow; else None."""
        rows = self.decoder.peek(data, self._rows) if self.decoder is not None else None
        if rows is None:
            return None
        force = self._force
        scale, offset, sign, column = force.scale, force.offset, force.sign, force.column
        return [sign * (row[column] * scale + offset) for row in rows]

    def keeps(self, data: bytes, forces_n: list[float], now_ns: int, band: tuple[float, float, bool]) -> bool:
        """Keep these bytes back? band: low and high, N, of what is no news, and whether all is calm."""
        low_n, high_n, calm = band
        rows = self._rows + len(forces_n)
        if rows >= (self._rows_max if calm else self._brisk):
            return False
        beyond = self.beyond
        for force_n in forces_n:
            if not low_n <= force_n:
                return False
            beyond = beyond + 1 if force_n > high_n else 0
        if beyond > bool(self._brisk) or (self.beyond and not beyond):
            return False
        self._data.append(data)
        self._rows, self._ns, self.beyond = rows, now_ns, beyond
        return True

    def take(self) -> tuple[bytes, int]:
        """All that waited, and when its last bytes came."""
        data = b"".join(self._data)
        self._data.clear()
        self._rows = self.beyond = 0
        return data, self._ns
