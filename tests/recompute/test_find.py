"""The catalogue answers what the records say, follows them, and is worth nothing beside them."""

from __future__ import annotations

import csv
import json
import shutil
import sqlite3
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from daq.cli.root import midspan
from daq.errors import MidspanError
from daq.recompute.catalogue import COLUMNS, Question, ask, update
from daq.record.recover import recover
from daq.stream.entry import Entry
from daq.stream.journal import Journal
from tests.record.synthetic_run import SyntheticBench

EVERYTHING = Question({}, {})


@pytest.fixture(scope="module")
def archive(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Four bars of two series; strengths 300, 310, 320 and none."""
    folder = tmp_path_factory.mktemp("archive")
    bench = SyntheticBench()
    entries: list[Entry] = []
    for series, specimen in (("kiln", "A1"), ("kiln", "A2"), ("oven", "B1"), ("oven", "B2")):
        entries += [*bench.idle(5), *bench.run(specimen, series=series, steps=8)]
    journal = Journal.create(folder / "journal-1", entries[0].stream_id, segment_bytes=1 << 18)
    journal.append(entries)
    journal.close()
    strengths = iter((300.0, 310.0, 320.0, None))

    def reduce(_: object) -> dict[str, object]:
        strength = next(strengths)
        return {"strength_mpa": strength, "modulus_gpa": 370.5, "verdict": "provisional"}

    recover(folder / "journal-1", folder / "records", reduce=reduce)
    return folder / "records"


@pytest.fixture
def data(archive: Path, tmp_path: Path) -> Path:
    return Path(shutil.copytree(archive, tmp_path / "records"))


def find(data: Path, *words: str) -> Result:
    base = data.parent / "catalogue.sqlite"
    return CliRunner().invoke(midspan, ["find", "--data", str(data), "--catalogue", str(base), *words])


def specimens(done: Result) -> list[str]:
    assert done.exit_code == 0, done.output
    return [row["specimen"] for row in json.loads(done.stdout)]


@pytest.mark.parametrize(
    ("words", "found"),
    [
        ([], ["A1", "A2", "B1", "B2"]),
        (["--series", "OVEN"], ["B1", "B2"]),
        (["--strength", "305.."], ["A2", "B1"]),
        (["--strength", "..310"], ["A1", "A2"]),
        (["--strength", "305..315", "--modulus", "370..371"], ["A2"]),
        (["--modulus", "..370"], []),
        (["--since", "2031"], ["A1", "A2", "B1", "B2"]),
        (["--until", "2031-05-06"], ["A1", "A2", "B1", "B2"]),
        (["--until", "2031-05-05"], []),
        (["--since", "2031-06"], []),
        (["--method", "bars", "--frame", "bench-x", "--operator", "tester", "--specimen", "1"], ["A1", "B1"]),
        (["--real"], []),
        (["--simulated", "--verdict", "provisional"], ["A1", "A2", "B1", "B2"]),
        (["--material", "100 %_"], []),
    ],
)
def test_a_question_is_answered(data: Path, words: list[str], found: list[str]) -> None:
    assert specimens(find(data, "--as", "json", *words)) == found


def test_every_form_says_the_same(data: Path) -> None:
    table = find(data).output
    assert "4 records" in table
    assert "strength_mpa" in table
    rows = list(csv.DictReader(find(data, "--as", "csv").stdout.splitlines()))
    assert tuple(rows[0]) == COLUMNS
    assert [row["strength_mpa"] for row in rows] == ["300.0", "310.0", "320.0", ""]
    assert all(Path(line).is_file() for line in find(data, "--as", "paths").stdout.splitlines())
    out = data.parent / "answer.json"
    assert find(data, "--as", "json", "--out", str(out)).exit_code == 0
    assert len(json.loads(out.read_text())) == 4
    assert find(data, "--as", "json", "--out", str(out)).exit_code == 1


def test_it_follows_the_records(data: Path, tmp_path: Path) -> None:
    file = tmp_path / "c.sqlite"
    assert update(file, data).read == 4
    assert update(file, data).read == 0
    first = sorted(data.rglob("*.h5"))[0]
    moved = first.rename(first.with_name("moved.h5"))
    again = update(file, data)
    assert (again.read, again.gone) == (1, 1)
    other = sorted(data.rglob("*.h5"))[-1]
    moved.unlink()
    shutil.copy(other, moved)  # another record under a known name
    assert update(file, data).read == 1
    assert sorted(row["specimen"] for row in ask(file, EVERYTHING)) == ["A2", "B1", "B2", "B2"]


def test_a_damaged_record_is_left_out_and_named(data: Path) -> None:
    first = sorted(data.rglob("*.h5"))[0]
    whole = first.read_bytes()
    first.write_bytes(whole[:-1])
    done = find(data, "--as", "json")
    assert specimens(done) == ["A2", "B1", "B2"]
    assert "left out:" in done.stderr
    assert "truncated" in done.stderr
    first.write_bytes(whole)
    assert specimens(find(data, "--as", "json")) == ["A1", "A2", "B1", "B2"]


@pytest.mark.parametrize("spoil", ["delete", "garbage inside", "version", "no table"])
def test_it_can_be_lost_and_is_made_again(data: Path, tmp_path: Path, spoil: str) -> None:
    file = tmp_path / "c.sqlite"
    update(file, data)
    before = ask(file, EVERYTHING)
    if spoil == "delete":
        file.unlink()
    elif spoil == "garbage inside":
        file.write_bytes(file.read_bytes()[:100] + b"\xff" * 8000)
    else:
        base = sqlite3.connect(file)
        base.execute("PRAGMA user_version = 99" if spoil == "version" else "DROP TABLE records")
        base.commit()
        base.close()
    assert update(file, data).read == 4
    assert ask(file, EVERYTHING) == before


def test_a_foreign_file_is_not_touched(data: Path, tmp_path: Path) -> None:
    for name, content in (("words.txt", b"my notes"), ("other.sqlite", b"")):
        file = tmp_path / name
        file.write_bytes(content)
        if not content:
            base = sqlite3.connect(file)
            base.execute("CREATE TABLE mine (x)")
            base.commit()
            base.close()
        before = file.read_bytes()
        with pytest.raises(MidspanError, match=r"cannot be used|another program"):
            update(file, data)
        assert file.read_bytes() == before


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--modulus", "370"], "write LOW..HIGH"),
        (["--modulus", "a..b"], "write LOW..HIGH"),
        (["--modulus", "400..300"], "400 is above 300"),
        (["--strength", ".."], "write LOW..HIGH"),
        (["--since", "yesterday"], "write a year, month or day"),
        (["--until", "2026-13"], "write a year, month or day"),
        (["--out", "x.csv"], "--out needs --as csv"),
        (["--as", "csv", "--out", "x.h5"], "no record's"),
    ],
)
def test_bad_words_are_one_clear_line(data: Path, words: list[str], said: str) -> None:
    done = find(data, *words)
    assert done.exit_code != 0
    assert said in done.stderr
    assert len(done.stderr.splitlines()) == 1
