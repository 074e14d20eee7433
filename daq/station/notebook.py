"""Notebook: a sealed record with the notes beside it, as it stands now; the one place where a note is taken down.

For the command line, the operator's seat and the report. Reads records, appends notes, changes nothing else.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from functools import lru_cache
from pathlib import Path
from typing import Any

from daq.cards.notes import Note, Quantity, read_note
from daq.errors import Refused
from daq.record.notes import Kept, append_note, read_notes
from daq.record.read import gaps_of, meta_of, open_sealed, run_of
from daq.results.corrections import value_of
from daq.results.notefaults import note_faults
from daq.results.standing import Standing, standing_of
from daq.stream.rundata import RunData


@dataclass(frozen=True, slots=True, eq=False)
class Page:
    """One loading. meta: what the record says of itself, with "path", "sha256", "gaps"; run: as sealed."""

    path: Path
    meta: Mapping[str, Any]
    run: RunData
    kept: Kept
    standing: Standing

    def stood_again(self, *, series_ratio: float | None) -> Page:
        """The same page, judged with what the rest of the series says of its stiffness."""
        run = self.run
        standing = standing_of(
            run.cards, self.meta["result"], self.kept.notes, lambda: run, series_ratio=series_ratio
        )
        return replace(self, standing=standing)


def read_page(path: Path) -> Page:
    """RecordDamaged for a record that is not as sealed. Damaged notes are told in `kept.problems`."""
    with open_sealed(path) as file:
        run = run_of(file)
        meta = {**meta_of(file), "gaps": gaps_of(file), "path": str(path), "sha256": _digest(path)}
    kept = read_notes(path)
    return Page(path, meta, run, kept, standing_of(run.cards, meta["result"], kept.notes, lambda: run))


def _digest(path: Path) -> str:
    facts = path.stat()
    return _digest_of(path, facts.st_mtime_ns, facts.st_size)


@lru_cache(maxsize=1024)
def _digest_of(path: Path, mtime_ns: int, size_bytes: int) -> str:
    from daq.record.publish import sha256_of

    return sha256_of(path)


def take_notes(path: Path, said: Sequence[Mapping[str, Any]], *, utc: str | None = None) -> Page:
    """Check all of them against what stands, then append all; returns the page as it stands afterwards.

    said: fields of daq.cards.notes.Note without `utc`. `old` of a correction or verdict may be left out; else it is
    compared with what stands, so that nobody changes what he has not seen. CardError for what is not a note, Refused
    with every reason for one that cannot be true of this loading; then nothing was written. RecordDamaged and OSError
    as in append_note.
    """
    page = read_page(path)
    stamp = utc or datetime.now(UTC).isoformat(timespec="milliseconds")
    notes: list[Note] = []
    before = list(page.kept.notes)
    standing, run = page.standing, page.run
    for fields in said:
        note = read_note({**_with_old(fields, standing), "utc": stamp})
        notes.append(note)
        faults = note_faults(note, standing)
        if faults:
            raise Refused("note", faults)
        before.append(note)
        standing = standing_of(run.cards, page.meta["result"], before, lambda: run)
    for note in notes:
        append_note(path, note)
    return read_page(path)


def _with_old(fields: Mapping[str, Any], standing: Standing) -> Mapping[str, Any]:
    """What stands now, where the one who notes did not say what he saw."""
    correction, verdict = fields.get("correction"), fields.get("verdict")
    known = {quantity.value: quantity for quantity in Quantity}
    if isinstance(correction, Mapping) and "old" not in correction and correction.get("quantity") in known:
        old = value_of(standing.cards, known[correction["quantity"]])
        return {**fields, "correction": {**correction, "old": old}}
    if isinstance(verdict, Mapping) and "old" not in verdict:
        return {**fields, "verdict": {**verdict, "old": standing.verdict.counting.value}}
    return fields
