"""Framing: bytes -> whole lines, with a bounded rest. Knows no fields, no numbers; never raises on bytes."""

from __future__ import annotations

from dataclasses import dataclass

from daq.errors import CardError


@dataclass(frozen=True, slots=True)
class Lines:
    """text: whole lines with their ends. overlong: lines that were longer than allowed and are gone."""

    text: bytes
    overlong: int
    discarded_bytes: int


class LineFramer:
    """Cuts a stream of bytes at the line ends and keeps at most one line of rest."""

    def __init__(self, line_end: bytes, line_bytes_max: int) -> None:
        if len(line_end) == 2 and line_end[0] == line_end[1]:
            raise CardError(
                (f"line_end = {line_end!r}: two equal bytes cannot mark one line end: use one of them",)
            )
        self.line_end = line_end
        self._rest_bytes_max = line_bytes_max + len(line_end) - 1
        self._rest = b""
        self._skipping = False

    @property
    def buffered_bytes(self) -> int:
        return len(self._rest)

    @property
    def rest(self) -> bytes | None:
        """What has come of the line that is not ended yet; None while an overlong one is passed over."""
        return None if self._skipping else self._rest

    def go_on_from(self, rest: bytes) -> None:
        """All before this rest was taken elsewhere."""
        self._rest = rest

    def take_one(self, data: bytes) -> bytes | None:
        """The one line, without its end, that these bytes complete exactly; None: use `take`, nothing has
        changed."""
        end = self.line_end
        if self._skipping or not data.endswith(end):
            return None
        if self._rest:
            data = self._rest + data
        if data.find(end) != len(data) - len(end):
            return None
        self._rest = b""
        return data[: -len(end)]

    def take(self, data: bytes) -> Lines:
        """All whole lines so far. A line that outgrows its limit is dropped up to its end and counted
        once."""
        data = self._rest + data if self._rest else data
        cut = data.rfind(self.line_end) + len(self.line_end)
        if cut < len(self.line_end):
            text, rest = b"", data
        else:
            text, rest = data[:cut], data[cut:]
        discarded, overlong = 0, 0
        if self._skipping and text:
            discarded = text.find(self.line_end) + len(self.line_end)
            text, overlong, self._skipping = text[discarded:], 1, False
        if self._skipping or len(rest) > self._rest_bytes_max:
            self._skipping = True
            kept = len(self.line_end) - 1
            discarded += max(len(rest) - kept, 0)
            rest = rest[-kept:] if kept else b""
        self._rest = rest
        return Lines(text, overlong, discarded)
