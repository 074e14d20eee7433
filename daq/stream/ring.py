"""Ring: the numbered stream's way out of the bench process. One writer, which never waits.

The writer numbers entries before it asks whether there is room, so a loss is a hole in the numbers that
nobody can overlook. It is also an entry: `ring_loss` {first_sequence, last_sequence, entries, bytes} stands
directly before the next entry that is admitted. RAW and BLOCK of one batch are admitted together or lost
together. EVENTs may use room that RAW and BLOCK may not.

What the recorder has not acknowledged is never overwritten; other readers may be overtaken and see it
(ring_reader.py). It refuses to block, to raise for want of room, and to read a clock.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import TypeAlias

from daq.stream.entry import Kind, PayloadTooLong, entry_bytes, pack_fields
from daq.stream.payloads import pack_event
from daq.stream.ring_file import (
    W_ACKED_NS,
    W_ACKED_POSITION,
    W_ACKED_SEQUENCE,
    W_CLOSED,
    W_EVENT_ROOM,
    W_LOST,
    W_NEWEST_NS,
    W_POSITION,
    W_RESERVED_TO,
    W_SEQUENCE,
    RingAbsent,
    RingFile,
    event_room_bytes,
    ring_bytes,
)
from daq.stream.ring_reader import RingReader, drain

__all__ = [
    "NewEntry",
    "Ring",
    "RingAbsent",
    "RingReader",
    "RingWriter",
    "drain",
    "event_room_bytes",
    "ring_bytes",
]

NewEntry: TypeAlias = tuple[Kind, int, bytes]
"""Kind, monotonic ns, payload: an entry that has no number yet."""


class Ring:
    """The door to the ring: who creates one writes to it."""

    @staticmethod
    def create(
        path: str | Path, size_bytes: int, stream_id: int, *, origin_ns: int = 0, journal: str = ""
    ) -> RingWriter:
        """A new ring of that capacity; `origin_ns` is the zero of time_s in events, `journal` where it is emptied."""
        return RingWriter(RingFile.create(path, size_bytes, stream_id, journal=journal), origin_ns=origin_ns)


class RingWriter:
    """The one writer. Sequences begin at 1."""

    def __init__(self, ring: RingFile, *, origin_ns: int = 0) -> None:
        self._ring = ring
        self._words = ring.words
        self._origin_ns = origin_ns
        self._position = 0
        self._sequence = 0
        self._newest_ns = 0
        self._hole_entries = 0
        self._hole_bytes = 0
        self._event_room: int = ring.words[W_EVENT_ROOM]

    # --- what the recorder has done -----------------------------------------------------------------------
    @property
    def acked_sequence(self) -> int:
        """Last entry the recorder holds safely; 0 = none."""
        return int(self._words[W_ACKED_SEQUENCE])

    @property
    def acked_ns(self) -> int:
        """Everything given to the ring before this monotonic instant is held safely; 0 = nothing was said yet."""
        return int(self._words[W_ACKED_NS])

    @property
    def lag_bytes(self) -> int:
        """Bytes not yet acknowledged."""
        return self._position - int(self._words[W_ACKED_POSITION])

    @property
    def last_sequence(self) -> int:
        """The last number given out, lost entries included; 0 = none."""
        return self._sequence

    @property
    def lost_entries(self) -> int:
        """Entries lost for want of room since the ring began."""
        return int(self._words[W_LOST])

    @property
    def capacity(self) -> int:
        """Bytes the ring holds."""
        return self._ring.capacity

    @property
    def stream_id(self) -> int:
        """The stream's number."""
        return self._ring.stream_id

    # --- writing ------------------------------------------------------------------------------------------
    def append_batch(self, entries: Sequence[NewEntry]) -> bool:
        """Number and write; False where any of these was lost (counted, and told by a ring_loss entry)."""
        if not entries:
            return True
        if self._hole_entries == 0 and self._admit(entries, self._free() - self._event_room):
            return True
        return self._append_scarce(entries)

    def close(self) -> None:
        """Tell a loss that is still untold, mark the ring as finished, let go of it. The file stays."""
        if self._ring.descriptor < 0:
            return
        if self._hole_entries:
            self._admit([], self._free())
        self._words[W_CLOSED] = 1
        self._ring.close()

    def _append_scarce(self, entries: Sequence[NewEntry]) -> bool:
        """The rare path: there is a hole to tell, or not enough room."""
        if self._admit(entries, self._free() - self._event_room):
            return True
        whole = True
        for entry in entries:
            if entry[0] is not Kind.EVENT or not self._admit([entry], self._free()):
                self._lose(entry)
                whole = False
        return whole

    def _lose(self, entry: NewEntry) -> None:
        self._sequence += 1
        self._hole_entries += 1
        self._hole_bytes += entry_bytes(len(entry[2]))
        self._words[W_SEQUENCE] = self._sequence
        self._words[W_LOST] += 1

    def _admit(self, entries: Sequence[NewEntry], room: int) -> bool:
        """Write these, after the untold hole's entry, if all of it fits."""
        newest_ns = entries[-1][1] if entries else self._newest_ns
        if self._hole_entries:
            entries = [(Kind.EVENT, newest_ns, self._hole_payload(newest_ns)), *entries]
        try:
            data, last = self._pack(entries, self._sequence)
        except PayloadTooLong:
            return False
        if len(data) > room or not self._commit(data, last, newest_ns):
            return False
        self._hole_entries = self._hole_bytes = 0
        return True

    def _hole_payload(self, monotonic_ns: int) -> bytes:
        return pack_event(
            {
                "event": "ring_loss",
                "time_s": (monotonic_ns - self._origin_ns) * 1e-9,
                "severity": "stop",
                "first_sequence": self._sequence - self._hole_entries + 1,
                "last_sequence": self._sequence,
                "entries": self._hole_entries,
                "bytes": self._hole_bytes,
            }
        )

    def _pack(self, entries: Iterable[NewEntry], sequence: int) -> tuple[bytes, int]:
        stream_id = self._ring.stream_id
        pieces = []
        for kind, monotonic_ns, payload in entries:
            sequence += 1
            pieces.append(pack_fields(kind, stream_id, sequence, monotonic_ns, payload))
        return b"".join(pieces), sequence

    def _free(self) -> int:
        """Bytes that hold nothing unacknowledged; none where the acknowledgement makes no sense."""
        used = self._position - self._words[W_ACKED_POSITION]
        return self._ring.capacity - used if 0 <= used <= self._ring.capacity else 0

    def _commit(self, data: bytes, last_sequence: int, newest_ns: int) -> bool:
        """Announce, write the body, publish: in this order, so that a reader sees when it was overtaken."""
        end = self._position + len(data)
        self._words[W_RESERVED_TO] = end
        try:
            self._ring.write(self._position, data)
        except OSError:
            return False  # the caller counts it as a loss: nothing in the ring may end the bench process
        self._words[W_SEQUENCE] = self._sequence = last_sequence
        self._words[W_NEWEST_NS] = self._newest_ns = newest_ns
        self._words[W_POSITION] = self._position = end
        return True
