"""The sealed record as somebody else sees it: read in another process by h5py alone, checked with the entries."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from daq.record.read import read_gaps, read_meta, read_run, read_stream, read_trace
from daq.stream.entry import Entry, Kind
from daq.stream.payloads import unpack_block, unpack_event
from tests.record.synthetic_run import FRAME, METHOD, demo_reduce, specimen_card

READER = """
import json, sys
import h5py, numpy as np
def plain(value):
    value = np.asarray(value)
    if value.dtype.kind == "S":
        return [text.decode("utf-8") for text in np.atleast_1d(value).tolist()]
    return [repr(number) for number in np.atleast_1d(value).tolist()]
found = {}
def look(name, item):
    facts = {"attrs": {key: plain(value) for key, value in item.attrs.items()}}
    types = [item.attrs.get_id(key).get_type() for key in item.attrs]
    if isinstance(item, h5py.Dataset):
        types.append(item.id.get_type())
        facts.update(shape=item.shape, chunks=item.chunks, gzip=item.compression, fletcher=item.fletcher32)
        if item.name != "/stream":
            facts["values"] = plain(item[()])
    facts["plain"] = not any(isinstance(t, h5py.h5t.TypeCompoundID) or (isinstance(t, h5py.h5t.TypeStringID)
        and t.is_variable_str()) for t in types)
    found[item.name] = facts
with h5py.File(sys.argv[1], "r") as file:
    look("/", file["/"])
    def walk(group):
        for name in group:
            look(name, group[name])
            if isinstance(group[name], h5py.Group):
                walk(group[name])
    walk(file)
assert not any(name.split(".")[0] in ("daq", "drivers") for name in sys.modules)
json.dump(found, sys.stdout)
"""


@pytest.fixture(scope="module")
def seen(record: Path) -> dict[str, Any]:
    done = subprocess.run(
        [sys.executable, "-I", "-c", READER, str(record)],
        capture_output=True,
        text=True,
        check=True,
        timeout=60,
    )
    found: dict[str, Any] = json.loads(done.stdout)
    return found


@pytest.fixture(scope="module")
def run_entries(two_runs: list[Entry]) -> list[Entry]:
    opened = next(place for place, entry in enumerate(two_runs) if b"run_opened" in entry.payload)
    closed = next(place for place, entry in enumerate(two_runs) if b"run_closed" in entry.payload)
    return two_runs[opened : closed + 1]


@pytest.mark.processes
def test_channels_are_what_the_entries_say(seen: dict[str, Any], run_entries: list[Entry]) -> None:
    opened_s = unpack_event(run_entries[0].payload)["time_s"]
    blocks = [unpack_block(entry.payload) for entry in run_entries if entry.kind is Kind.BLOCK]
    for source, column, name in ((0, 0, "load"), (0, 1, "crosshead"), (1, 0, "sag")):
        card = next(channel for channel in FRAME["channels"] if channel["name"] == name)
        own = [block for block in blocks if block.source == source]
        counts = [count for block in own for count in block.counts[:, column].tolist()]
        times = [time_s - opened_s for block in own for time_s in block.time_s.tolist()]
        index = [block.first_index + row for block in own for row in range(block.count)]
        scale, offset, sign = card["scale"], card.get("offset", 0.0), card.get("sign", 1)
        value = [sign * (count * scale + offset) for count in counts]
        for stored, expected in (("counts", counts), ("time_s", times), ("index", index), ("value", value)):
            assert seen[f"/channels/{name}/{stored}"]["values"] == [repr(number) for number in expected], (
                stored
            )


@pytest.mark.processes
def test_every_type_is_one_that_old_readers_know(seen: dict[str, Any]) -> None:
    assert all(facts["plain"] for facts in seen.values())
    columns = [facts for name, facts in seen.items() if name.startswith("/channels/") and "shape" in facts]
    assert len(columns) == 12
    for facts in [*columns, seen["/stream"]]:
        assert facts["chunks"] and facts["gzip"] == "gzip" and facts["fletcher"]


@pytest.mark.processes
def test_the_file_says_what_it_is(seen: dict[str, Any]) -> None:
    root = seen["/"]["attrs"]
    assert root["format"] == ["midspan plain record"] and root["format_version"] == ["1"]
    assert root["simulated"] == ["1"] and "SIMULATED" in root["warning"][0]
    assert root["created"] == ["2031-05-06T07:08:09.123Z"] and root["default"] == ["trace"]
    value = seen["/channels/load/value"]["attrs"]
    assert value["units"] == ["N"] and value["scale"] == ["0.0131"] and value["sign"] == ["-1.0"]
    assert seen["/channels/crosshead/value"]["attrs"]["counts_min"] == ["-500000.0"]
    trace = seen["/trace"]["attrs"]
    assert (
        trace["NX_class"] == ["NXdata"] and trace["signal"] == ["stress_mpa"] and trace["axes"] == ["strain"]
    )
    assert seen["/trace/stress_mpa"]["attrs"]["units"] == ["MPa"]


@pytest.mark.processes
def test_events_gaps_and_cards_are_plain_text_and_tables(
    seen: dict[str, Any], run_entries: list[Entry]
) -> None:
    events = [json.loads(text) for text in seen["/events/json"]["values"]]
    own = [entry for entry in run_entries if entry.kind is Kind.EVENT]
    assert [event["event"] for event in events] == [unpack_event(entry.payload)["event"] for entry in own]
    assert seen["/events/sequence"]["values"] == [str(entry.sequence) for entry in own]
    assert events[0]["time_s"] == 0.0 and "frame" not in events[0]
    assert json.loads(seen["/cards/frame"]["values"][0]) == FRAME
    assert json.loads(seen["/cards/method"]["values"][0]) == METHOD
    assert json.loads(seen["/cards/specimen"]["values"][0]) == specimen_card("A01")
    assert seen["/gaps/missing"]["values"] == ["4", "-1"] and seen["/gaps/source"]["values"] == [
        "main",
        "main",
    ]


def test_reading_gives_back_what_the_reduction_was_given(record: Path) -> None:
    run = read_run(record)
    assert list(run.channels) == ["load", "crosshead", "sag"], "in the order of the frame card"
    result = demo_reduce(run)
    trace = result.pop("trace")
    assert read_meta(record)["result"] == result
    stored = read_trace(record)
    assert list(stored) == ["stress_mpa", "strain"]
    assert stored["stress_mpa"].tobytes() == trace["stress_mpa"].tobytes()
    assert run.channels["load"].time_s is run.channels["crosshead"].time_s
    with pytest.raises(ValueError, match="read-only"):
        run.channels["load"].value[0] = 0.0


def test_the_stream_is_the_runs_own_entries_and_a_short_lead_in(
    record: Path, run_entries: list[Entry], two_runs: list[Entry]
) -> None:
    assert list(read_stream(record)) == run_entries
    longer = list(read_stream(record, lead_in=True))
    before = len(longer) - len(run_entries)
    assert before == 64
    place = two_runs.index(run_entries[0])
    assert longer[:before] == two_runs[place - before : place]


def test_a_run_cut_off_by_the_end_of_its_journal_is_interrupted(records: tuple[Path, ...]) -> None:
    assert [read_meta(path)["interrupted"] for path in records] == [False, True]
    assert [path.name for path in records] == ["kiln_A01_01.h5", "kiln_A02_01.h5"]


def test_gaps_read_back_as_rows(record: Path) -> None:
    gaps = read_gaps(record)
    assert [(gap["kind"], gap["source"], gap["missing"]) for gap in gaps] == [
        ("samples", "main", 4),
        ("samples", "main", -1),
    ]
    index = read_run(record).channels["load"].index
    assert gaps[0]["before_index"] == index[np.flatnonzero(np.diff(index) == 5)[0] + 1]
