"""Output: result files that commands write. Never over an existing one unless asked, never half a file."""

from __future__ import annotations

import os
from pathlib import Path

from daq.errors import MidspanError


def demand_free(*targets: Path | None, force: bool) -> None:
    """Before long work: whether the results can be written at all."""
    for target in targets:
        if target is None:
            continue
        if target.exists() and not force:
            raise MidspanError(f"{target} is there already; --force writes over it")
        if not target.absolute().parent.is_dir():
            raise MidspanError(f"{target}: there is no folder {target.absolute().parent}")


def write_text(target: Path, text: str) -> None:
    """The whole file or none."""
    temp = target.with_name(f".{target.name}.part")
    try:
        with open(temp, "w", encoding="utf-8", errors="backslashreplace", newline="") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        os.replace(temp, target)
    except OSError:
        temp.unlink(missing_ok=True)
        raise
