"""Leftovers: rings and journals of dead daemons, brought home at the next start. Never removes what it could not save.

A ring names the journal it is emptied into, so that one left by a daemon with another data folder goes there.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from daq.errors import MidspanError, RecordingError
from daq.record.recorder import drain_ring
from daq.record.recover import recover
from daq.record.sealing import Reduce
from daq.station.places import Places, data_of_journal
from daq.stream.ring import RingReader

Report = Callable[[Mapping[str, Any]], None]
Tell = Callable[[str], None]


def clear_leftovers(
    places: Places,
    own_stream_id: int,
    reduce: Reduce,
    report: Report,
    tell: Tell,
    pulse: Callable[[], object],
) -> None:
    """Everything but our own stream becomes records. What cannot be had now is kept, and said."""

    def note(said: Mapping[str, Any]) -> None:
        if said["report"] == "status":
            return  # of one leftover among several: not the word that all is done
        report(said)
        if said["report"] == "sealed":
            tell(f"recovered from an earlier run: {said['path']}")
        elif said["report"] == "journal_damaged":
            tell(f"{said['path']} is damaged and is kept: {said['why']}")

    journals = set(places.spool.glob("journal-*")) - {places.journal(own_stream_id)}
    for ring in sorted(set(places.runtime.glob("ring-*")) - {places.ring(own_stream_id)}):
        journal = home_of(ring, places)
        journals.discard(
            journal
        )  # until the ring is in it: its last entries would be missing from the record
        with told(tell, f"{ring} is kept (it is memory, and LOST WITH A REBOOT)"):
            if not journal.parent.is_dir():
                raise RecordingError(
                    f"it belongs to the data folder {data_of_journal(journal)}, which is not there:"
                    " mount it, or make it, and start midspan again"
                )
            drain_ring(ring, journal)
            journals.add(journal)
    for journal in sorted(journals):
        report({"report": "recovering", "journal": journal.name})
        with told(tell, f"{journal} is kept"):
            recover(journal, data_of_journal(journal), reduce=reduce, report=note, pulse=pulse)


def home_of(ring: Path, places: Places) -> Path:
    """The journal a ring belongs into: as its header names it, else the one of its number in our own spool."""
    own = places.spool / f"journal-{ring.name.removeprefix('ring-')}"
    try:
        reader = RingReader(ring)
    except RecordingError:
        return own
    try:
        return Path(reader.journal or own)
    finally:
        reader.close()


@contextmanager
def told(tell: Tell, consequence: str) -> Iterator[None]:
    """What one leftover cannot give must not cost the others, nor the daemon."""
    try:
        yield
    except (MidspanError, OSError) as error:
        tell(f"{consequence}: {error}")
