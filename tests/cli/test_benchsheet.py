"""The bench sheet as the window writes it: what it takes, asks and refuses; other bars stay as they are."""

from __future__ import annotations

from pathlib import Path

import pytest

from daq.cards.load import example_path, load_series
from daq.cli.benchsheet import BenchSheet
from daq.errors import CardError

SIZES = {"width_1_mm": "4,003", "width_2_mm": "4.001", "width_3_mm": "4.002 mm"} | {
    f"thickness_{n}_mm": f"3.00{n}" for n in (1, 2, 3)
}


@pytest.fixture
def series(tmp_path: Path) -> Path:
    for name in ("demo-series.toml", "demo-series.csv", "alumina-demo.toml"):
        (tmp_path / name).write_bytes(example_path(name).read_bytes())
    return tmp_path / "demo-series.toml"


def test_a_bar_is_added_and_the_loader_reads_it(series: Path) -> None:
    before = (series.parent / "demo-series.csv").read_text("utf-8")
    BenchSheet(series).write({"number": "DEMO-77", **SIZES, "chamfer_mm": "0,12", "length_mm": ""})
    bars = load_series(series).specimens
    assert (
        bars[-1].number == "DEMO-77"
        and bars[-1].width_mm == (4.003, 4.001, 4.002)
        and bars[-1].chamfer_mm == 0.12
    )
    kept = (series.parent / "demo-series.csv").read_text("utf-8").splitlines()
    assert [line.split(",")[:7] for line in kept[:-1]] == [
        line.split(",")[:7] for line in before.splitlines()
    ]


def test_a_bar_measured_again_stands_in_its_place(series: Path) -> None:
    BenchSheet(series).write({"number": "demo-02", **SIZES})
    bars = load_series(series).specimens
    assert [bar.number for bar in bars][1] == "demo-02" and bars[1].thickness_mm == (3.001, 3.002, 3.003)
    assert len(bars) == 6


def test_a_sheet_begins_with_its_first_bar_and_keeps_a_semicolon(series: Path) -> None:
    sheet = series.parent / "demo-series.csv"
    sheet.unlink()
    BenchSheet(series).write({"number": "A-1", **SIZES})
    assert load_series(series).specimens[0].number == "A-1"
    sheet.write_text(sheet.read_text("utf-8").replace(",", ";").replace(".", ","), encoding="utf-8")
    BenchSheet(series).write({"number": "A-2", **SIZES, "length_mm": "50"})
    assert [bar.length_mm for bar in load_series(series).specimens] == [None, 50.0]


@pytest.mark.parametrize(
    ("cells", "told"),
    [
        ({"width_1_mm": "0"}, "width_1_mm"),
        ({"width_1_mm": "-4"}, "width_1_mm"),
        ({"thickness_2_mm": "three"}, "thickness_2_mm"),
        ({"thickness_3_mm": ""}, "thickness_3_mm"),
        ({"number": "../x"}, "number"),
        ({f"width_{n}_mm": "0.157" for n in (1, 2, 3)}, "inch"),
        ({f"width_{n}_mm": "40.02" for n in (1, 2, 3)}, "ten times"),
        (
            {
                **{f"width_{n}_mm": "3.0" for n in (1, 2, 3)},
                **{f"thickness_{n}_mm": "4.0" for n in (1, 2, 3)},
            },
            "swapped",
        ),
    ],
)
def test_slips_are_refused_with_the_place_and_nothing_is_written(
    series: Path, cells: dict[str, str], told: str
) -> None:
    sheet = BenchSheet(series)
    before = sheet.path.read_bytes()
    row = {"number": "DEMO-77", **SIZES, **cells}
    assert told in " ".join(sheet.judge(row).wrong)
    with pytest.raises(CardError):
        sheet.write(row)
    assert sheet.path.read_bytes() == before


def test_scatter_and_tolerance_are_asked_not_refused(series: Path) -> None:
    judged = BenchSheet(series).judge(
        {"number": "DEMO-77", **SIZES, "width_2_mm": "4.05", "chamfer_mm": "0.4"}
    )
    assert judged.wrong == () and len(judged.asked) == 2
    assert "scatter by" in judged.asked[0] and "tenth" in judged.asked[1]
