"""Head: who and what a run is, taken from its run_opened event alone. Pure; touches no file.

The event carries the resolved cards, so a record can be rebuilt from the stream without any other source.
A field that is missing is replaced by a plain stand-in and never stops the recording: the entries are kept
in any case.
"""

from __future__ import annotations

import re
import sys
import uuid
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

from daq.stream.entry import Entry
from daq.stream.payloads import unpack_event

_FILE_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9_.-]{0,63}")  # the same rule as daq.cards.series.FileName


@dataclass(frozen=True, slots=True)
class ChannelPlan:
    """One column of a link: value = sign * (counts * scale + offset), in `unit`."""

    name: str
    role: str
    unit: str
    scale: float
    offset: float
    sign: float
    card: Mapping[str, Any]


@dataclass(frozen=True, slots=True)
class SourcePlan:
    """One link of the frame card and its channels in block column order."""

    link: str
    channels: tuple[ChannelPlan, ...]


@dataclass(frozen=True, slots=True)
class Head:
    """Identity, start and cards of one run."""

    run_id: str
    series: str
    specimen: str
    loading: int
    stream_id: int
    sequence: int
    opened_s: float
    opened_ns: int
    created_utc: str
    simulated: bool
    sources: tuple[SourcePlan, ...]
    cards: Mapping[str, Any]

    @property
    def stem(self) -> str:
        """File name without its ending; names were checked, so it holds no separator."""
        return f"{self.series}_{self.specimen}_{self.loading:02d}"

    @property
    def channel_names(self) -> tuple[str, ...]:
        return tuple(channel.name for source in self.sources for channel in source.channels)


def head_of(fields: Mapping[str, Any], *, stream_id: int, sequence: int, monotonic_ns: int) -> Head:
    """Read a run_opened event. Total: any mapping gives a head."""
    frame = _mapping(fields.get("frame"))
    run = dict(_mapping(fields.get("run")))
    for key in ("run_id", "series", "specimen", "loading", "operator", "fixture"):
        run.setdefault(key, fields.get(key))
    run_id = _run_id(run["run_id"], stream_id, sequence)
    return Head(
        run_id=run_id,
        series=_file_name(run["series"], "unnamed"),
        specimen=_file_name(run["specimen"], run_id[:8]),
        loading=run["loading"] if _is_count(run["loading"]) else 1,
        stream_id=stream_id,
        sequence=sequence,
        opened_s=_number(fields.get("time_s"), 0.0),
        opened_ns=monotonic_ns,
        created_utc=str(fields.get("utc") or run.get("utc") or "not known"),
        simulated=frame.get("simulated") is not False,  # what is not known to be real never counts as real
        sources=_sources(frame),
        cards={
            "frame": frame,
            "method": _mapping(fields.get("method")),
            "specimen": _mapping(fields.get("specimen_card")),
            "run": run,
        },
    )


def head_of_entry(entry: Entry) -> Head:
    """The same from the entry itself."""
    fields = unpack_event(entry.payload)
    return head_of(
        fields, stream_id=entry.stream_id, sequence=entry.sequence, monotonic_ns=entry.monotonic_ns
    )


def _sources(frame: Mapping[str, Any]) -> tuple[SourcePlan, ...]:
    channels = [_mapping(channel) for channel in _list(frame.get("channels"))]
    links = [str(_mapping(link).get("name", place)) for place, link in enumerate(_list(frame.get("links")))]
    plans = [_channel(card, place) for place, card in enumerate(channels)]
    if len({plan.name for plan in plans}) < len(plans):
        plans = [replace(plan, name=f"{plan.name}-{place}") for place, plan in enumerate(plans)]
    return tuple(SourcePlan(link, tuple(p for p in plans if p.card.get("link") == link)) for link in links)


def _channel(card: Mapping[str, Any], place: int) -> ChannelPlan:
    return ChannelPlan(
        name=_file_name(card.get("name"), f"channel-{place}"),
        role=str(card.get("role", "other")),
        unit=str(card.get("unit", "")),
        scale=_number(card.get("scale"), 1.0),
        offset=_number(card.get("offset"), 0.0),
        sign=_number(card.get("sign"), 1.0),
        card=card,
    )


def _run_id(text: object, stream_id: int, sequence: int) -> str:
    try:
        return str(uuid.UUID(str(text)))
    except ValueError:
        return str(uuid.uuid5(uuid.NAMESPACE_OID, f"{text} {stream_id} {sequence}"))


def _file_name(text: object, otherwise: str) -> str:
    return str(text) if _FILE_NAME.fullmatch(str(text)) else otherwise


def _is_count(number: object) -> bool:
    return isinstance(number, int) and not isinstance(number, bool) and 1 <= number <= 9999


def _number(number: object, otherwise: float) -> float:
    if isinstance(number, bool) or not isinstance(number, int | float) or abs(number) > sys.float_info.max:
        return otherwise
    return float(number)


def _list(found: object) -> list[Any]:
    return found if isinstance(found, list) else []


def _mapping(found: object) -> Mapping[str, Any]:
    return found if isinstance(found, Mapping) else {}
