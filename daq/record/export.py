"""Export: a sealed record as CSV and JSON for people who want no HDF5. Reads records only, overwrites
nothing.

<stem>_columns_<link>.csv  one a link: index, time_s, counts and value of each channel, units in the names
<stem>_events.csv          sequence, time_s, event, severity, and the other fields as JSON
<stem>_result.json         what the record says of itself, UTC and local time, gaps, result, cards

Decimal point, UTF-8, comma, numbers in the shortest form that reads back bit for bit; what could not be
decoded is nan. A simulated record has a column `simulated` with a 1 in every row.
"""

from __future__ import annotations

import csv
import io
import json
import os
from collections.abc import Callable, Iterator, Sequence
from datetime import datetime
from pathlib import Path
from typing import Any

from daq.errors import MidspanError
from daq.record.publish import publish_new
from daq.record.read import gaps_of, meta_of, open_sealed, run_of
from daq.record.texts import plain_text
from daq.stream.rundata import ChannelData, RunData

ROWS_AT_ONCE = 20_000
_UNIT_ENDINGS = {"N": "n", "mm": "mm", "degC": "degc", "percent": "percent", "V": "v", "1": "ratio"}


class ExportRefused(MidspanError):
    """A target stands there already."""


def export_csv(
    path: Path,
    folder: Path,
    *,
    force: bool = False,
    progress: Callable[[float], object] = bool,
) -> tuple[Path, ...]:
    """Write the files; progress is told the part done, 0 to 1. ExportRefused where one stands already."""
    with open_sealed(path) as file:
        run, meta, gaps = run_of(file), meta_of(file), gaps_of(file)
        links = {name: plain_text(group.attrs["link"]) for name, group in file["channels"].items()}
    folder.mkdir(parents=True, exist_ok=True)
    texts: dict[Path, Iterator[str]] = {}
    names = dict.fromkeys(links[name] for name in run.channels)
    for place, link in enumerate(names):
        channels = [channel for name, channel in run.channels.items() if links[name] == link]
        told = _Part(progress, place, len(names))
        texts[folder / f"{path.stem}_columns_{link}.csv"] = _columns(channels, bool(meta["simulated"]), told)
    texts[folder / f"{path.stem}_events.csv"] = _events(run)
    texts[folder / f"{path.stem}_result.json"] = iter([_about(run, meta, gaps)])
    taken = [target.name for target in texts if target.exists()]
    if taken and not force:
        raise ExportRefused(f"{', '.join(taken)} in {folder} would be overwritten; --force overwrites")
    for target, pieces in texts.items():
        _write(target, pieces, force=force)
    progress(1.0)
    return tuple(texts)


class _Part:
    """Progress of one file among several."""

    def __init__(self, progress: Callable[[float], object], place: int, count: int) -> None:
        self._progress, self._place, self._count = progress, place, count

    def __call__(self, done: float) -> None:
        self._progress((self._place + done) / self._count)


def column_name(channel: ChannelData) -> str:
    """The channel's name with its unit last, once."""
    ending = _UNIT_ENDINGS.get(channel.unit, "")
    name = channel.name.replace("-", "_")
    return name if not ending or name.endswith(f"_{ending}") else f"{name}_{ending}"


def _columns(
    channels: Sequence[ChannelData], simulated: bool, told: Callable[[float], object]
) -> Iterator[str]:
    names = ["index", "time_s"]
    columns: list[Any] = [channels[0].index, channels[0].time_s]
    for channel in channels:
        names += [f"{channel.name.replace('-', '_')}_counts", column_name(channel)]
        columns += [channel.counts, channel.value]
    ending = ",1\n" if simulated else "\n"
    yield ",".join([*names, *(["simulated"] if simulated else ())]) + "\n"
    rows = len(columns[0])
    for first in range(0, rows, ROWS_AT_ONCE):
        table = [map(repr, column[first : first + ROWS_AT_ONCE].tolist()) for column in columns]
        yield "".join(",".join(row) + ending for row in zip(*table, strict=True))
        told(min(1.0, (first + ROWS_AT_ONCE) / rows))


def _events(run: RunData) -> Iterator[str]:
    text = io.StringIO()
    table = csv.writer(text, lineterminator="\n")
    table.writerow(["sequence", "time_s", "event", "severity", "fields"])
    for event in run.events:
        known = [event.get(key, "") for key in ("sequence", "time_s", "event", "severity")]
        rest = {
            key: value
            for key, value in event.items()
            if key not in ("sequence", "time_s", "event", "severity")
        }
        table.writerow([*known, json.dumps(rest, ensure_ascii=False, sort_keys=True)])
    yield text.getvalue()


def _about(run: RunData, meta: dict[str, Any], gaps: list[dict[str, Any]]) -> str:
    created = {"created_utc": meta["created_utc"], "created_local": _local(str(meta["created_utc"]))}
    about = {
        "record": {**{key: value for key, value in meta.items() if key != "result"}, **created},
        "result": meta["result"],
        "gaps": gaps,
        "cards": run.cards,
    }
    return json.dumps(about, ensure_ascii=False, indent=2, sort_keys=True) + "\n"


def _local(utc: str) -> str:
    """The same instant in this computer's time zone, with its offset."""
    try:
        return datetime.fromisoformat(utc).astimezone().isoformat()
    except ValueError:
        return "not known"


def _write(target: Path, pieces: Iterator[str], *, force: bool) -> None:
    temp = target.with_name(f".{target.name}.part")
    with open(temp, "w", encoding="utf-8", errors="backslashreplace", newline="") as file:
        file.writelines(pieces)
        file.flush()
        os.fsync(file.fileno())
    if force:
        os.replace(temp, target)
        return
    try:
        publish_new(temp, target)
    except FileExistsError as error:
        temp.unlink()
        raise ExportRefused(f"{target} came to be meanwhile; nothing was overwritten") from error
