"""midspan plan: text and JSON say the same, orders are kept, gates block, bad words are one line."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from daq.cards.load import example_path
from daq.cli.root import midspan

FRAME = str(example_path("kiln-lane-a.toml"))
SERIES = str(example_path("alumina-series.toml"))


@pytest.fixture(autouse=True)
def no_own_folder(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setenv("XDG_CONFIG_HOME", str(tmp_path / "config"))


def called(*words: str) -> Result:
    result = CliRunner().invoke(midspan, ["plan", *words])
    assert result.exception is None or isinstance(result.exception, SystemExit), result.exc_info
    return result


def rows_of(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8") as file:
        return list(csv.DictReader(file))


def test_text_and_json_say_the_same():
    words = ("C1161-B", "--frame", FRAME, "--bars", "30", "--seed", "7")
    text, data = called(*words), json.loads(called(*words, "--json").output)
    assert text.exit_code == 0
    mean = next(row for row in data["breaks"] if row["name"] == "mean")
    (line,) = [line for line in text.output.splitlines() if line.startswith("  mean   ")]
    assert line.split()[1:] == ["460", "383", "89.6", "136", "16.3", "31.1"]
    assert mean["load_n"] == pytest.approx(459.6, abs=0.05)
    assert data["fixture"] == "quarter-40-20" and data["blocked"] == 0
    order = [word for line in text.output.splitlines()[-3:] for word in line.split()]
    assert order == data["order"] and len(order) == 30 and data["seed"] == 7
    assert all(len(line) <= 132 for line in text.output.splitlines())


def test_a_series_card_brings_its_bars_and_fixture(tmp_path):
    out = tmp_path / "order.csv"
    shown = called(SERIES, "--frame", FRAME, "--seed", "3", "--order", str(out), "--json")
    data = json.loads(shown.output)
    rows = rows_of(out)
    assert [row["number"] for row in rows] == data["order"]
    assert {row["seed"] for row in rows} == {"3"} and len(rows) == 30 == data["bars"]
    again = called(SERIES, "--frame", FRAME, "--seed", "3", "--order", str(out))
    assert again.exit_code == 1 and "is not overwritten" in again.stderr
    assert rows_of(out) == rows


def test_a_drawn_seed_is_told_and_gives_the_order_again():
    drawn = json.loads(called("C1161-B", "--bars", "12", "--json").output)
    again = json.loads(called("C1161-B", "--bars", "12", "--seed", str(drawn["seed"]), "--json").output)
    assert drawn["order"] == again["order"]


def test_a_blocked_gate_needs_a_name_and_a_reason(tmp_path):
    dental = str(example_path("dental-bars.toml"))
    words = (
        dental,
        "--capacity",
        "5000",
        "--verified",
        "100",
        "5000",
        "--stiffness",
        "10000",
        "--bars",
        "10",
    )
    out = tmp_path / "order.csv"
    refused = called(*words, "--order", str(out))
    assert refused.exit_code == 1 and "35.9 % of the bars" in refused.stdout
    assert "a gate is blocked (capacity)" in refused.stderr and not out.exists()
    taken = called(*words, "--order", str(out), "--accept", "K. Lane: trial of the fixture only")
    assert taken.exit_code == 0 and "accepted by K. Lane: trial" in taken.stdout and out.exists()


def test_figures_of_the_call_come_before_the_cards():
    data = json.loads(
        called("C1161-B", "--frame", FRAME, "--stiffness", "1e9", "--strength", "300", "--weibull", "8",
               "--sample-rate", "100", "--bandwidth", "100", "--speed", "0.4", "--json").output
    )  # fmt: skip
    assert data["expected"]["strength_mpa"] == 300.0 and data["speed_mm_min"] == 0.4
    assert data["frame_stiffness_source"] == "given" and data["machine_share"] < 1e-5


@pytest.mark.parametrize(
    ("words", "code", "told"),
    [
        (["nonsense"], 1, "see `midspan methods`"),
        ([], 2, "Missing argument"),
        (
            ["C1161-B", "--span", "12"],
            1,
            "span over thickness is 4: below 5 the flexure formula does not hold",
        ),
        (["C1161-B", "--strength", "30000"], 1, "a twentieth of modulus_gpa = 380 GPa"),
        (["C1161-B", "--modulus", "0.05"], 1, "a number > 0.1 and <= 1000 GPa"),
        (["C1161-B", "--thickness", "-3"], 1, "a number > 0 mm"),
        (["C1161-B", "--order", "x.csv"], 2, "a firing order needs bars"),
        (["C1161-B", "--fixture", "q"], 2, "add --frame"),
        (["C1161-B", "--frame", FRAME, "--fixture", "q"], 1, "choose one of quarter-40-20"),
        (["C1161-B", "--frame", FRAME, "--fixture", "three-40"], 1, "because fixture three-40 is fitted"),
        (["C1161-B", "--frame", "nothere.toml"], 1, "nothere.toml: file = cannot be read"),
        (["C1161-B", "--bars", "0"], 2, "1<=x<=2000"),
        (["C1161-B", "--accept", "me"], 2, "'NAME: reason'"),
        (["C1161-B", "--verified", "100", "10"], 2, "the lowest force first"),
        (["C1161-B", "--stiffness", "0"], 2, "x>0"),
        ([SERIES, "--bars", "3"], 2, "in the bench sheet"),
    ],
)
def test_what_cannot_be_planned_is_one_line(words, code, told):
    result = called(*words)
    assert result.exit_code == code and told in result.stderr, result.stderr
    assert len(result.stderr.splitlines()) == 1 and result.stdout == ""
