"""Notes beside sealed records: appended, chained, damage named, old and new kept, and nothing sealed ever touched."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import pytest
from click.testing import CliRunner

from daq.cards.notes import read_note
from daq.cli.root import midspan
from daq.errors import RecordDamaged, Refused
from daq.record.notes import LEDGER, append_note, notes_path, read_notes
from daq.record.publish import sha256_of
from daq.results.rules import Counting
from daq.station.notebook import read_page, take_notes
from tests.made_series import made_series

ME = {"name": "Q. Tester", "reason": "looked again"}
UTC = "2031-05-06T07:08:09.123+00:00"


@pytest.fixture(scope="module")
def sealed(tmp_path_factory: pytest.TempPathFactory) -> list[Path]:
    """A broken bar and one that was stopped on the way."""
    return made_series(tmp_path_factory.mktemp("made"), 2, interrupt=frozenset({"A-02"}))


@pytest.fixture
def records(sealed: list[Path], tmp_path: Path) -> list[Path]:
    return [Path(shutil.copy(path, tmp_path)) for path in sealed]


def correct(quantity: str, *new: float) -> dict:
    return {**ME, "correction": {"quantity": quantity, "new": new}}


@pytest.mark.slow
def test_a_correction_is_reduced_again_and_keeps_what_was(records: list[Path]) -> None:
    path, before = records[0], sha256_of(records[0])
    page = take_notes(path, [correct("thickness_mm", 3.1, 3.1, 3.1)], utc=UTC)
    old, new = page.standing.sealed["strength_mpa"], page.standing.result["strength_mpa"]
    assert new == pytest.approx(old * (3.0 / 3.1) ** 2, rel=1e-9)
    assert page.standing.result["modulus_gpa"] == pytest.approx(
        page.standing.sealed["modulus_gpa"] * (3.0 / 3.1) ** 3, rel=1e-6
    )
    (change,) = page.standing.changes
    assert (change.old, change.new, change.name, change.reason) == (
        [3.0] * 3,
        [3.1] * 3,
        "Q. Tester",
        "looked again",
    )
    assert page.standing.as_json()["as_sealed"]["strength_mpa"] == old
    assert sha256_of(path) == before
    again = take_notes(path, [correct("thickness_mm", 3.0, 3.0, 3.0)])
    assert again.standing.result["strength_mpa"] == old and len(again.standing.changes) == 2


@pytest.mark.slow
def test_scenario_7_a_span_corrected_halves_the_stress(records: list[Path]) -> None:
    """The fixture of the record said 40/20; had it truly been 20/10, the stress is half of what was sealed."""
    page = take_notes(records[0], [correct("load_span_mm", 10.0), correct("support_span_mm", 20.0)])
    assert page.standing.result["strength_mpa"] == pytest.approx(page.standing.sealed["strength_mpa"] / 2.0)
    assert page.standing.result["modulus_gpa"] == pytest.approx(
        page.standing.sealed["modulus_gpa"] / 8.0, rel=1e-6
    )
    assert [change.what for change in page.standing.changes] == ["load_span_mm", "support_span_mm"]


@pytest.mark.slow
def test_break_note_and_a_person_who_overrules(records: list[Path]) -> None:
    page = take_notes(
        records[0], [{**ME, "break_note": {"from_mid_mm": (-15.0,), "origin": "Pv", "pieces": 2}}]
    )
    assert page.standing.place.share == 0.5 and page.standing.origin.population == "Pv"
    assert page.standing.local_mpa == pytest.approx(page.standing.result["strength_mpa"] / 2.0)
    page = take_notes(records[0], [{**ME, "verdict": {"new": "not counted"}}])
    standing = page.standing
    assert standing.verdict.counting is Counting.NOT_COUNTED and not standing.counts
    assert standing.verdict.by == "Q. Tester" and standing.by_rules.counting is not Counting.NOT_COUNTED
    assert standing.strength_mpa is not None  # known, and never thrown away
    assert standing.changes[-1].old == standing.by_rules.counting.value


@pytest.mark.parametrize(
    ("bar", "fields", "word"),
    [
        (0, {**ME, "break_note": {"from_mid_mm": (20.5,)}}, "supports"),
        (0, {**ME, "break_note": {"origin_depth_mm": 3.5}}, "thickness"),
        (0, correct("thickness_mm", 3.0, 3.0, 3.0), "already"),
        (0, correct("load_span_mm", 40.0), "below the support span"),
        (0, correct("inner_diameter_mm", 1.0), "rectangle has none"),
        (0, {**ME, "correction": {"quantity": "width_mm", "old": (9.0,), "new": (4.1,)}}, "what stands"),
        (0, {**ME, "verdict": {"old": "provisional", "new": "not counted"}}, "what stands"),
        (1, {**ME, "verdict": {"new": "counted"}}, "no strength"),
        (1, {**ME, "break_note": {"from_mid_mm": (1.0,)}}, "broke no bar"),
    ],
)
def test_what_cannot_be_true_is_refused_and_nothing_is_written(
    sealed, bar: int, fields: dict, word: str
) -> None:
    with pytest.raises(Refused, match=word):
        take_notes(sealed[bar], [fields])
    assert not notes_path(sealed[bar]).exists()


def note(text: str) -> object:
    return read_note({"name": "Q. Tester", "utc": UTC, "remark": text})


@pytest.fixture
def noted(tmp_path: Path) -> Path:
    """Three notes beside a file that stands for a record; the chain does not care what it holds."""
    path = tmp_path / "bar.h5"
    path.write_bytes(b"sealed")
    for text in ("one", "two", "three"):
        append_note(path, note(text))
    return path


def test_notes_read_back_in_order(noted: Path) -> None:
    kept = read_notes(noted)
    assert [n.remark for n in kept.notes] == ["one", "two", "three"] and kept.problems == ()
    assert json.loads(notes_path(noted).read_bytes().splitlines()[-1])["sha256"] == kept.head


def test_every_changed_byte_is_seen(noted: Path) -> None:
    path = notes_path(noted)
    good = path.read_bytes()
    for place in range(0, len(good), 17):
        path.write_bytes(good[:place] + bytes([good[place] ^ 0x01]) + good[place + 1 :])
        assert read_notes(noted).problems, place


@pytest.mark.parametrize(
    "turn",
    [
        lambda rows: rows[:-1],
        lambda rows: rows[1:],
        lambda rows: rows[::-1],
        lambda rows: [],
        lambda rows: rows * 2,
    ],
    ids=["last taken out", "first taken out", "turned round", "all taken out", "doubled"],
)
def test_every_line_taken_out_or_moved_is_seen(noted: Path, turn) -> None:
    path = notes_path(noted)
    path.write_bytes(b"".join(turn(path.read_bytes().splitlines(keepends=True))))
    assert read_notes(noted).problems
    with pytest.raises(RecordDamaged, match="nothing was added"):
        append_note(noted, note("four"))


def test_another_record_or_a_lost_notes_file_is_seen(noted: Path) -> None:
    noted.write_bytes(b"another")
    assert "not the one it was written after" in read_notes(noted).problems[0]
    notes_path(noted).unlink()
    assert "3 notes were written, 0 are there" in read_notes(noted).problems[0]


def test_a_changed_ledger_is_seen(noted: Path) -> None:
    ledger = noted.with_name(LEDGER)
    ledger.write_bytes(ledger.read_bytes().replace(b"bar.h5", b"rab.h5", 1))
    assert "not as written" in read_notes(noted).problems[0]


def test_a_kill_between_the_two_files_is_made_good(noted: Path) -> None:
    ledger = noted.with_name(LEDGER)
    before = ledger.read_bytes()
    append_note(noted, note("four"))
    ledger.write_bytes(before)  # the kill: noted, not yet listed
    assert len(read_notes(noted).notes) == 4 and read_notes(noted).problems == ()
    append_note(noted, note("five"))
    assert len(ledger.read_bytes().splitlines()) == 5 and read_notes(noted).problems == ()


@pytest.mark.slow
def test_the_command_shows_the_verdict_before_the_strength(records: list[Path]) -> None:
    shell = CliRunner()
    words = ["note", str(records[0]), "--name", "Q. Tester", "--at", "3.5", "--origin", "Pv"]
    done = shell.invoke(midspan, words, catch_exceptions=False)
    assert done.exit_code == 0 and done.output.index("verdict") < done.output.index("strength")
    for bad in (
        ["--at", "3"],
        ["--name", "Q", "--at", "99"],
        ["--name", "Q", "--correct", "width=3"],
        ["--reason", "x"],
    ):
        refused = shell.invoke(midspan, ["note", str(records[0]), *bad])
        assert refused.exit_code and len(refused.stderr.strip().splitlines()) == 1, refused.output
    assert len(read_page(records[0]).kept.notes) == 1
    assert "whole: 1 notes" in shell.invoke(midspan, ["verify", str(records[0])]).output
