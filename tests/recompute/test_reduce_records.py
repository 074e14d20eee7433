"""A record comes out again to the last bit; what was altered in it is named; old ones give their numbers for ever."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner

from daq.cli.root import midspan
from daq.recompute.many import recompute_all, records_in
from daq.recompute.one import Recomputed, recompute
from daq.record.publish import sha256_of
from daq.results.reduce import result_mapping
from daq.stream.block import Block
from daq.stream.entry import Entry, Kind
from daq.stream.payloads import pack_block, pack_event, pack_raw, unpack_block, unpack_event, unpack_raw
from tests.recompute.made import broken_bar, sealed

DATA = Path(__file__).parent.parent / "data"
NUMBERS = {  # of tests/data/record-1.h5 when it was sealed; these never change
    "strength_mpa": 442.3888655913977,
    "strength_u_k2_mpa": 4.614464260670022,
    "peak_recovered_n": 530.8666387096772,
    "peak_raw_n": 530.5844,
    "tare_n": 2.4076,
    "after_zero_n": -0.020079999999999903,
    "modulus_gpa": 371.3327172622448,
    "modulus_corrected_gpa": 380.04185109402715,
    "force_rate_mean_n_s": 27.82547283683547,
    "time_to_break_s": 18.214999999999996,
    "strain_at_break": 0.0011916327015926561,
}


@pytest.fixture(scope="module")
def entries() -> list[Entry]:
    return broken_bar()


@pytest.fixture(scope="module")
def record(tmp_path_factory: pytest.TempPathFactory, entries: list[Entry]) -> Path:
    return sealed(tmp_path_factory.mktemp("bar"), entries)[0]


def altered(entries: list[Entry], change: Callable[[Entry], bytes | None]) -> list[Entry]:
    """The same stream with one payload changed: the first for which `change` gives another."""
    out, done = [], False
    for entry in entries:
        payload = None if done else change(entry)
        done = done or payload is not None
        out.append(entry if payload is None else replace(entry, payload=payload))
    assert done
    return out


def whats(found: Recomputed) -> str:
    return " | ".join(map(str, found.differences))


# -- the same


@pytest.mark.slow
def test_every_number_and_every_decision_comes_out_again(record: Path) -> None:
    before = sha256_of(record), record.stat().st_mtime_ns
    found = recompute(record)
    assert (found.damage, found.differences, found.notes) == ("", (), ())
    assert found.decisions > 50
    assert found.result["strength_mpa"] > 100.0
    assert (sha256_of(record), record.stat().st_mtime_ns) == before


@pytest.mark.parametrize("name", ["record-1.h5", "record-1-memory.h5"])
def test_old_records_give_their_numbers_for_ever(name: str) -> None:
    """record-1 was written before the bench kept what it remembers, its twin with it. Decisions of the watch may one
    day be others than they were: then they are listed, and the numbers stay."""
    found = recompute(DATA / name)
    assert not found.damage
    assert [each for each in found.differences if not each.what.startswith("decision ")] == []
    for key, value in NUMBERS.items():
        assert found.result[key] == pytest.approx(value, rel=1e-12), key


def test_what_an_old_record_does_not_tell_is_said() -> None:
    found = recompute(DATA / "record-1.h5")
    assert found.decisions == 0
    assert "taken as recorded" in found.notes[0]


def test_numbers_only_leaves_the_decisions_and_says_so() -> None:
    whole, numbers = (
        recompute(DATA / "record-1-memory.h5"),
        recompute(DATA / "record-1-memory.h5", watch=False),
    )
    assert numbers.result == whole.result
    assert numbers.decisions == 0
    assert any("decisions are taken as recorded" in note for note in numbers.notes)


# -- not the same


def no_block_of_the_lead_in(entries: list[Entry]) -> Callable[[Entry], bool]:
    opened = next(e.sequence for e in entries if b'"run_opened"' in e.payload)
    return lambda entry: entry.sequence > opened


@pytest.mark.slow
def test_an_altered_block_is_named(tmp_path: Path, entries: list[Entry]) -> None:
    inside = no_block_of_the_lead_in(entries)

    def change(entry: Entry) -> bytes | None:
        if entry.kind is not Kind.BLOCK or not inside(entry):
            return None
        block = unpack_block(entry.payload)
        counts = block.counts.copy()
        counts[0, 0] += 1.0
        return pack_block(Block(block.source, block.first_index, block.time_s, counts, block.gap_samples))

    found = recompute(sealed(tmp_path, altered(entries, change))[0])
    assert "counts: 1 of" in whats(found)
    assert "row 0" in whats(found)


@pytest.mark.slow
def test_an_altered_byte_of_the_wire_is_named(tmp_path: Path, entries: list[Entry]) -> None:
    inside = no_block_of_the_lead_in(entries)

    def change(entry: Entry) -> bytes | None:
        if entry.kind is not Kind.RAW or not inside(entry):
            return None
        raw = unpack_raw(entry.payload)
        if raw.sent or len(raw.data) < 20:
            return None
        data, middle = raw.data, len(raw.data) // 2
        return pack_raw(raw.link, False, data[:middle] + bytes([data[middle] ^ 1]) + data[middle + 1 :])

    found = recompute(sealed(tmp_path, altered(entries, change))[0])
    assert "link main: rows" in whats(found)


@pytest.mark.slow
@pytest.mark.parametrize(
    ("event", "key", "value"),
    [("tared", "tare_n", 1.0), ("fracture", "verdict", "gradual failure"), ("seated", "toe_n", 0.0)],
)
def test_an_altered_decision_is_named(
    tmp_path: Path, entries: list[Entry], event: str, key: str, value: object
) -> None:
    def change(entry: Entry) -> bytes | None:
        if entry.kind is not Kind.EVENT or unpack_event(entry.payload)["event"] != event:
            return None
        return pack_event({**unpack_event(entry.payload), key: value})

    found = recompute(sealed(tmp_path, altered(entries, change))[0])
    assert f"stored {event} " in whats(found)
    assert f"{key}={value}" in whats(found)


@pytest.mark.slow
def test_an_altered_result_is_named(
    tmp_path: Path, entries: list[Entry], monkeypatch: pytest.MonkeyPatch
) -> None:
    def flattered(run: Any) -> dict[str, Any]:
        found = result_mapping(run)
        return {**found, "strength_mpa": found["strength_mpa"] * 1.001}

    monkeypatch.setattr("tests.recompute.made.result_mapping", flattered)
    found = recompute(sealed(tmp_path, entries)[0])
    assert [each.what for each in found.differences] == ["result.strength_mpa"]


@pytest.mark.slow
def test_lost_entries_end_the_proof_and_are_told(tmp_path: Path, entries: list[Entry]) -> None:
    kept = [*entries[: len(entries) // 2], *entries[len(entries) // 2 + 7 :]]
    found = recompute(sealed(tmp_path, kept)[0])
    assert "7 entries are missing" in found.notes[0]


@pytest.mark.slow
def test_a_record_cut_off_by_a_crash_comes_out_again(tmp_path: Path, entries: list[Entry]) -> None:
    found = recompute(sealed(tmp_path, entries[: len(entries) - len(entries) // 4])[0])
    assert (found.damage, found.differences, found.notes) == ("", (), ())


# -- the command


def damaged(record: Path, to: Path) -> Path:
    data = bytearray(record.read_bytes())
    data[len(data) // 2] ^= 1
    to.write_bytes(bytes(data))
    return to


@pytest.mark.slow
def test_a_folder_is_done_to_its_end_whatever_lies_in_it(tmp_path: Path) -> None:
    (tmp_path / "a.h5").write_bytes((DATA / "record-1.h5").read_bytes())
    damaged(DATA / "record-1.h5", tmp_path / "b.h5")
    (tmp_path / "c.h5").write_text("not a record")
    (tmp_path / "d").mkdir()
    (tmp_path / "d" / "e.h5").write_bytes((DATA / "record-1-memory.h5").read_bytes())
    (tmp_path / ".spool").mkdir()
    (tmp_path / ".spool" / "f.live.h5").write_text("not sealed yet")
    words = ["reduce", str(tmp_path), "--jobs", "1"]
    table, whole = tmp_path / "r.csv", tmp_path / "r.json"
    done = CliRunner().invoke(midspan, [*words, "--csv", str(table), "--json", str(whole)])
    assert done.exit_code == 1
    assert "4 records" in done.output
    assert "2 the same, 2 not" in done.output
    faults = [line for line in done.stderr.splitlines() if line.startswith("midspan reduce: ")]
    assert len(faults) == 2
    assert "altered after it was sealed" in faults[0]
    assert "not a sealed midspan record" in faults[1]
    head, *lines = table.read_text("utf-8").splitlines()
    assert len(lines) == 4
    assert "strength_mpa" in head.split(",")
    found = json.loads(whole.read_text("utf-8"))
    assert [Path(each["path"]).name for each in found] == ["a.h5", "b.h5", "c.h5", "e.h5"]
    assert found[0]["result"]["strength_mpa"] == NUMBERS["strength_mpa"]


@pytest.mark.slow
def test_processes_give_the_same_in_the_same_order(tmp_path: Path) -> None:
    for number in range(4):
        (tmp_path / f"{number}.h5").write_bytes((DATA / "record-1.h5").read_bytes())
    records = records_in([tmp_path])
    assert list(recompute_all(records, jobs=2)) == list(recompute_all(records, jobs=1))


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["nowhere.h5"], "nowhere.h5 is not there"),
        (["."], "no sealed record (.h5) in ."),
        ([str(DATA), "--csv", "x.h5"], "a result file may not have the name of a record"),
        ([str(DATA), "--csv", "no/such/x.csv"], "there is no folder"),
        ([str(DATA), "--relative", "0.1"], "0.0<=x<=1e-06"),
        ([str(DATA), "--jobs", "0"], "1<=x<=256"),
    ],
)
def test_bad_words_are_one_clear_line(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, words: list[str], said: str
) -> None:
    monkeypatch.chdir(tmp_path)
    done = CliRunner().invoke(midspan, ["reduce", *words])
    assert done.exit_code != 0
    assert said in done.stderr
    assert len(done.stderr.splitlines()) == 1


def test_result_files_of_before_are_not_lost(tmp_path: Path) -> None:
    table = tmp_path / "r.csv"
    table.write_text("precious")
    done = CliRunner().invoke(midspan, ["reduce", str(DATA), "--csv", str(table)])
    assert done.exit_code == 1
    assert "is there already" in done.stderr
    assert table.read_text() == "precious"
