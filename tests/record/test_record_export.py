"""What CSV readers other than ours get out of an exported record."""

from __future__ import annotations

import csv
import json
from datetime import datetime
from pathlib import Path

import numpy as np
import pytest

from daq.record.export import ExportRefused, export_csv
from daq.record.read import read_meta, read_run


@pytest.fixture(scope="module")
def exported(record: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("csv")
    told: list[float] = []
    names = [path.name for path in export_csv(record, folder, progress=told.append)]
    assert names == [
        f"kiln_A01_01_{end}" for end in ("columns_main.csv", "columns_gauge.csv", "events.csv", "result.json")
    ]
    assert told == sorted(told) and told[-1] == 1.0
    return folder


def test_columns_read_back_bit_for_bit_by_numpy(exported: Path, record: Path) -> None:
    run = read_run(record)
    path = exported / "kiln_A01_01_columns_main.csv"
    header = path.read_text("utf-8").split("\n", 1)[0]
    assert header == "index,time_s,load_counts,load_n,crosshead_counts,crosshead_mm,simulated"
    table = np.loadtxt(path, delimiter=",", skiprows=1)
    load, position = run.channels["load"], run.channels["crosshead"]
    expected = (
        load.index.astype(float),
        load.time_s,
        load.counts,
        load.value,
        position.counts,
        position.value,
    )
    for column, values in enumerate(expected):
        assert table[:, column].tobytes() == values.tobytes()
    assert (table[:, -1] == 1).all(), "simulated in every row"


def test_columns_read_back_by_the_csv_module(exported: Path, record: Path) -> None:
    with open(exported / "kiln_A01_01_columns_gauge.csv", encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    sag = read_run(record).channels["sag"]
    assert [float(row["sag_mm"]) for row in rows] == sag.value.tolist()
    assert [int(row["index"]) for row in rows] == sag.index.tolist()


def test_events_and_result(exported: Path, record: Path) -> None:
    with open(exported / "kiln_A01_01_events.csv", encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    events = read_run(record).events
    assert [row["event"] for row in rows] == [event["event"] for event in events]
    assert [float(row["time_s"]) for row in rows] == [event["time_s"] for event in events]
    note = next(row for row in rows if row["event"] == "note")
    assert json.loads(note["fields"]) == {"text": "smells of burning — check"}
    about = json.loads((exported / "kiln_A01_01_result.json").read_text("utf-8"))
    assert about["result"] == read_meta(record)["result"]
    assert about["record"]["simulated"] is True and about["record"]["created_utc"].endswith("Z")
    utc, local = (datetime.fromisoformat(about["record"][key]) for key in ("created_utc", "created_local"))
    assert utc == local
    assert about["gaps"][0]["missing"] == 4 and about["cards"]["specimen"]["number"] == "A01"


def test_nothing_is_overwritten_without_force(record: Path, tmp_path: Path) -> None:
    (tmp_path / "kiln_A01_01_events.csv").write_text("notes of mine")
    with pytest.raises(ExportRefused, match=r"kiln_A01_01_events.csv in .* --force"):
        export_csv(record, tmp_path)
    assert [path.name for path in tmp_path.iterdir()] == ["kiln_A01_01_events.csv"], (
        "refused before the first file"
    )
    export_csv(record, tmp_path, force=True)
    assert (tmp_path / "kiln_A01_01_events.csv").read_text("utf-8").startswith("sequence,")
