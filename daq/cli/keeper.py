"""The keeper: break notes and verdicts of the window, in the one place where notes are taken down."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from daq.station.notebook import Page, read_page, take_notes
from monitor.said import Said


class Keeper:
    """Break notes and verdicts of the window, in the one place where notes are taken down."""

    def read(self, record: Path) -> Said:
        return said_of(read_page(record))

    def take(self, record: Path, said: list[dict[str, Any]]) -> Said:
        return said_of(take_notes(record, said))


def said_of(page: Page) -> Said:
    """What the window shows of a page."""
    standing, note = page.standing, page.standing.break_note
    return Said(
        verdict=standing.verdict.counting.value,
        reason=standing.verdict.reason,
        by=standing.verdict.by,
        strength_mpa=standing.strength_mpa,
        from_mid_mm=tuple(note.from_mid_mm or ()) if note is not None else (),
        notes=len(page.kept.notes),
    )
