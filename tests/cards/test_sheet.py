"""The bench sheet: what is read, and every way a cell, a row or the whole table is refused."""

from __future__ import annotations

import pytest

from daq.cards.load import example_path, load_method, load_sheet
from daq.cards.sheet import read_sheet, reading_mm
from daq.errors import CardError

HEADER = "number,width_1_mm,width_2_mm,width_3_mm,thickness_1_mm,thickness_2_mm,thickness_3_mm"
ROW = "A-1,4.001,4.002,4.003,3.001,3.002,3.003"


@pytest.fixture(scope="module")
def method():
    return load_method(example_path("alumina-bars.toml"))


@pytest.fixture(scope="module")
def tube(method):
    return method.model_copy(
        update={
            "section": "tube",
            "diameter_mm": 5.0,
            "inner_diameter_mm": 3.0,
            "readings": 2,
            "chamfer_mm": 0.0,
        }
    )


def lines_of(text, method):
    sheet = read_sheet(text, method)
    return tuple(fault.line("s", {}).removeprefix("s: ") for fault in sheet.faults)


def test_a_row_with_everything(method):
    text = f'{HEADER},chamfer_mm,length_mm,batch,note\n{ROW},0.12,45.1,K7,"chip, left"\n'
    (bar,) = read_sheet(text, method).specimens
    assert bar.number == "A-1"
    assert bar.width_mm == (4.001, 4.002, 4.003)
    assert bar.thickness_mm == (3.001, 3.002, 3.003)
    assert (bar.chamfer_mm, bar.length_mm, bar.batch, bar.note) == (0.12, 45.1, "K7", "chip, left")


def test_optional_cells_stay_open(method):
    (bar,) = read_sheet(f"{HEADER},chamfer_mm,length_mm\n{ROW},,\n", method).specimens
    assert bar.chamfer_mm is None
    assert bar.length_mm is None


def test_decimal_comma_with_semicolons(method):
    text = (HEADER + "\n" + ROW).replace(",", ";").replace(".", ",")
    (bar,) = read_sheet(text, method).specimens
    assert bar.width_mm == (4.001, 4.002, 4.003)


def test_decimal_point_with_semicolons_and_a_unit(method):
    text = (HEADER + "\n" + ROW.replace("4.001", "4.001 mm")).replace(",", ";")
    (bar,) = read_sheet(text, method).specimens
    assert bar.width_mm[0] == 4.001


@pytest.mark.parametrize("start", ["", "\ufeff"])
@pytest.mark.parametrize("end", ["\n", "\r\n"])
def test_byte_order_mark_and_line_ends(tmp_path, method, start, end):
    path = tmp_path / "sheet.csv"
    path.write_bytes((start + HEADER + end + ROW + end + end).encode("utf-8"))
    assert len(load_sheet(path, method)) == 1


def test_a_tube(tube):
    text = "number,diameter_1_mm,diameter_2_mm,inner_diameter_mm\nT1,5.01,5.02,3.00\n"
    (bar,) = read_sheet(text, tube).specimens
    assert (bar.thickness_mm, bar.width_mm, bar.inner_diameter_mm) == ((5.01, 5.02), (), 3.0)


CELLS = [
    ("4.001", "0", "line 2, width_1_mm = '0': a number > 0 mm"),
    ("4.001", "0.0", "line 2, width_1_mm = '0.0': a number > 0 mm"),
    ("4.001", "-4.001", "line 2, width_1_mm = '-4.001': a number > 0 mm"),
    ("4.001", "four", "line 2, width_1_mm = 'four': a number in mm"),
    ("4.001", "", "line 2, width_1_mm = '': a number in mm: measure and enter it"),
    ("4.001", "4.001 in", "line 2, width_1_mm = '4.001 in': a number in mm"),
    ("4.001", "nan", "line 2, width_1_mm = 'nan': a number in mm"),
    ("4.001", "inf", "line 2, width_1_mm = 'inf': a number in mm"),
    ("4.001", "4e0", "line 2, width_1_mm = '4e0': a number in mm"),
    ("4.001", "4_0", "line 2, width_1_mm = '4_0': a number in mm"),
    ("4.001", "٤", "line 2, width_1_mm = '٤': a number in mm"),
    ("4.001", "1.234.5", "line 2, width_1_mm = '1.234.5': a number in mm"),
    ("4.001", '"4,001"', "line 2, width_1_mm = '4,001': a decimal point: with a decimal comma the delimiter"),
    ("4.001", "10001", "line 2, width_1_mm = '10001': at most 10000 mm"),
    ("A-1", "", "line 2, number = '': a name has 1 to 64"),
    ("A-1", "../A", "line 2, number = '../A': a name is made of the letters"),
    ("A-1", ".hid", "line 2, number = '.hid': a name begins with"),
    ("A-1", "CON", "line 2, number = 'CON': this name is reserved"),
    ("A-1", "x" * 65, "line 2, number = 'xxx"),
]


@pytest.mark.parametrize(("old", "new", "expected"), CELLS, ids=[repr(case[1])[:20] for case in CELLS])
def test_a_cell_is_refused(method, old, new, expected):
    (line,) = lines_of(f"{HEADER}\n{ROW.replace(old, new, 1)}\n", method)
    assert line.startswith(expected), line


OPTIONAL = [
    ("chamfer_mm", "1.6", "less than 1.5005 mm, half the smaller side"),
    ("chamfer_mm", "-0.1", "a number >= 0 mm"),
    ("length_mm", "40", "more than the support span of 40 mm"),
    ("length_mm", "0", "a number > 0 mm"),
    ("batch", "x" * 81, "text of at most 80 characters"),
    ("note", "ding\x07", "text of at most 200 characters without control"),
]


@pytest.mark.parametrize(("column", "text", "expected"), OPTIONAL)
def test_an_optional_cell_is_refused(method, column, text, expected):
    (line,) = lines_of(f"{HEADER},{column}\n{ROW},{text}\n", method)
    assert line.startswith(f"line 2, {column} = "), line
    assert expected in line


def test_a_chamfer_of_zero_is_a_chamfer(method):
    (bar,) = read_sheet(f"{HEADER},chamfer_mm\n{ROW},0\n", method).specimens
    assert bar.chamfer_mm == 0.0


def test_every_fault_of_every_row_is_told_at_once(method):
    rows = [ROW, ROW.replace("A-1", "a-1"), "A-2,x,4,0,3,3,3", "A-3,4,4,4,3,3", "A-4,4,4,4,3,3,3"]
    lines = lines_of("\n".join([HEADER, *rows]), method)
    assert [line.partition(" = ")[0] for line in lines] == [
        "line 3, number",
        "line 4, width_1_mm",
        "line 4, width_3_mm",
        "line 5",
    ]
    assert "line 2 has this one" in lines[0]
    assert "7 cells" in lines[3]


WHOLE = [
    ("", "sheet = empty"),
    (HEADER, "sheet = no rows: one row for each bar"),
    (f"{HEADER},colour\n{ROW},red", "column 8 = 'colour': a column of a rectangle with 3 readings"),
    (f"{HEADER},width_3_mm\n{ROW},4", "column 8 = 'width_3_mm': every column once"),
    (f"{HEADER},chamfer_in\n{ROW},4", "column 8 = 'chamfer_in'"),
    (f'{HEADER}\n{ROW}\n"open', "sheet = "),
    (f"{HEADER}\n" + "\n".join(f"B{n}" for n in range(2001)), "sheet = 2001 rows: at most 2000 bars"),
]


@pytest.mark.parametrize(("text", "expected"), WHOLE, ids=range(len(WHOLE)))
def test_a_whole_table_is_refused(method, text, expected):
    (line,) = lines_of(text, method)
    assert line.startswith(expected), line


def test_an_inch_column_is_never_converted(method):
    lines = lines_of(HEADER.replace("width_1_mm", "width_1_in") + "\n" + ROW, method)
    assert "convert in millimetres" in lines[0]
    assert lines[1].startswith("sheet = no column width_1_mm")


def test_fewer_readings_than_the_method_asks_for(method):
    lines = lines_of("number,width_1_mm,thickness_1_mm\nA,4,3", method)
    assert [line.partition(":")[0] for line in lines] == [
        f"sheet = no column {side}_{n}_mm" for side in ("width", "thickness") for n in (2, 3)
    ]


@pytest.mark.parametrize(
    ("bore", "part"), [("", "a diameter > 0 mm"), ("5.01", "less than the outer diameter of 5.01 mm")]
)
def test_the_bore_of_a_tube(tube, bore, part):
    (line,) = lines_of(f"number,diameter_1_mm,diameter_2_mm,inner_diameter_mm\nT1,5.01,5.02,{bore}\n", tube)
    assert line.startswith("line 2, inner_diameter_mm")
    assert part in line


def test_a_chamfer_column_of_a_tube_is_unknown(tube):
    (line,) = lines_of(
        "number,diameter_1_mm,diameter_2_mm,inner_diameter_mm,chamfer_mm\nT1,5,5,3,0.1\n", tube
    )
    assert line.startswith("column 5 = 'chamfer_mm'")


def test_faults_name_the_file(tmp_path, method):
    path = tmp_path / "sheet.csv"
    path.write_text(f"{HEADER}\n{ROW.replace('4.001', '0')}\n", encoding="utf-8")
    with pytest.raises(CardError) as caught:
        load_sheet(path, method)
    assert caught.value.problems[0].startswith(f"{path}: line 2, width_1_mm = '0'")


@pytest.mark.parametrize(("text", "value"), [("4.003", 4.003), (" 4,003 mm", 4.003), ("+3", 3.0)])
def test_a_reading_typed_at_the_bench(text, value):
    assert reading_mm(text) == value


@pytest.mark.parametrize("text", ["", "0", "-1", "abc", "4 cm", "4,0,0", "1e3", "99999"])
def test_a_reading_typed_at_the_bench_is_refused(text):
    with pytest.raises(ValueError, match=r"^reading = .*: .*: .*"):
        reading_mm(text)
