"""Mark: how far the archivist has finished with a journal, as a small file beside the segments.

The archivist writes it, the recorder reads it before it lets old segments go. Standard library only: the
recorder must start without h5py. An unreadable mark counts as no mark, so that nothing is deleted on a
doubt.
"""

from __future__ import annotations

import json
import os
from dataclasses import asdict, dataclass
from pathlib import Path

MARK_NAME = "sealed-up-to.json"
COPIES_MAX = 10_000  # a bench breaks some hundred bars a day: weeks of an absent copy folder


@dataclass(frozen=True, slots=True)
class Mark:
    """needed_from: first sequence the archivist may still ask for; what lies before is sealed or of no run.

    copies: sealed records, relative to the out folder, whose verified copy into `copy_to` is still owed.
    """

    stream_id: int
    needed_from: int
    copies: tuple[str, ...] = ()
    copy_to: str = ""


def read_mark(folder: Path) -> Mark | None:
    """The mark of that journal, or None where there is none that can be trusted."""
    try:
        found = json.loads((folder / MARK_NAME).read_text(encoding="utf-8"))
        mark = Mark(
            int(found["stream_id"]), int(found["needed_from"]), tuple(found["copies"]), str(found["copy_to"])
        )
    except (OSError, ValueError, KeyError, TypeError):
        return None
    return mark if all(isinstance(name, str) for name in mark.copies) else None


def write_mark(folder: Path, mark: Mark) -> None:
    """Replace the mark in one step; durable when this returns."""
    assert len(mark.copies) <= COPIES_MAX
    text = json.dumps(asdict(mark))
    fresh = folder / (MARK_NAME + ".new")
    with open(fresh, "w", encoding="utf-8") as file:
        file.write(text)
        file.flush()
        os.fsync(file.fileno())
    os.replace(fresh, folder / MARK_NAME)
    sync_folder(folder)


def sync_folder(folder: Path) -> None:
    """Make created and renamed names of that folder durable."""
    descriptor = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)
