"""`midspan report`: the same bytes twice, every bar in it, what is missing said, a damaged record named."""

from __future__ import annotations

import csv
import io
import json
import shutil
from pathlib import Path

import pytest
from click.testing import CliRunner

from daq.cli.reporting import gather, write_report
from daq.cli.root import midspan
from daq.series.content import report_of
from daq.station.notebook import take_notes
from tests.made_series import made_series
from tests.scenarios.world import method_of

pytest.importorskip("matplotlib")
pytest.importorskip("reportlab")
pytest.importorskip("jinja2")
pytestmark = pytest.mark.slow

ME = {"name": "Q. Tester", "reason": "dropped on the floor"}
BARS = 7


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Seven bars: one stopped on the way, one not counted, one corrected."""
    out = tmp_path_factory.mktemp("made")
    run = {"material": "alumina, invented", "temperature_c": 21.5, "humidity_percent": 45.0}
    paths = made_series(out, BARS, interrupt=frozenset({"A-03"}), run=run, method=method_of(speed_mm_min=1.5))
    utc = "2031-05-06T07:08:09+00:00"
    take_notes(paths[0], [{**ME, "verdict": {"new": "not counted"}}], utc=utc)
    take_notes(
        paths[1], [{**ME, "correction": {"quantity": "thickness_mm", "new": (3.02, 3.02, 3.02)}}], utc=utc
    )
    take_notes(paths[3], [{**ME, "break_note": {"from_mid_mm": (4.5,), "origin": "Pv"}}], utc=utc)
    return paths[0].parent


@pytest.fixture(scope="module")
def written(folder: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, bytes]:
    out = tmp_path_factory.mktemp("report")
    return {path.suffix[1:]: path.read_bytes() for path in write_report(gather(folder), out)}


def test_the_same_records_give_the_same_bytes(
    folder: Path, written: dict[str, bytes], tmp_path: Path
) -> None:
    again = {path.suffix[1:]: path.read_bytes() for path in write_report(gather(folder), tmp_path)}
    assert again == written and set(written) == {"html", "pdf", "csv", "json"}
    assert written["pdf"].startswith(b"%PDF") and b"http" not in written["html"]


def test_every_loading_is_in_every_form(written: dict[str, bytes]) -> None:
    page, whole = written["html"].decode(), json.loads(written["json"])
    rows = list(csv.DictReader(io.StringIO(written["csv"].decode())))
    names = [f"A-{n:02d}" for n in range(1, BARS + 1)]
    assert [row["specimen"] for row in rows] == [one["specimen"] for one in whole["loadings"]] == names
    assert all(name in page for name in names)
    assert {row["verdict"] for row in rows} >= {"not counted", "interrupted"}
    assert all(row["simulated"] == "1" for row in rows) and "SIMULATED DATA" in page
    assert all(len(row["sha256"]) == 64 and row["sha256"] in page for row in rows)
    assert all(name.endswith(("_n", "_mpa", "_mm", "_s", "_mj", "_gpa", "_percent", "_mpa_s", "_utc"))
               for name, value in rows[1].items() if value and _is_number(value)
               and name not in ("loading", "strain_at_break", "changes", "simulated"))  # fmt: skip


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def test_old_and_new_values_stand_beside_each_other(written: dict[str, bytes]) -> None:
    page, whole = written["html"].decode(), json.loads(written["json"])
    assert "thickness_mm changed from 3, 3, 3 to 3.02, 3.02, 3.02" in page and "strength as sealed" in page
    assert "verdict changed from" in page and "dropped on the floor (Q. Tester" in page
    standing = whole["loadings"][1]["standing"]
    assert standing["as_sealed"]["strength_mpa"] == pytest.approx(
        standing["strength_mpa"] * (3.02 / 3.0) ** 2, rel=1e-9
    )


def test_what_the_method_asks_and_nobody_gave_marks_every_page(folder: Path) -> None:
    series = gather(folder)
    assert report_of(series).marks == ("SIMULATED DATA",)
    method = series.method.model_copy(update={"report_fields": ("break place", "standard")})
    leaves = series.leaves
    setup = leaves[0].standing.setup
    object.__setattr__(setup, "method", method)  # a frozen value of this test's own
    report = report_of(series)
    assert "INCOMPLETE" in report.marks
    told = " ".join(line for block in report.sections[0].blocks for line in getattr(block, "lines", ()))
    assert "break place of every broken bar" in told and "standard" in told


def test_damaged_records_and_bad_words_are_one_line_each(folder: Path, tmp_path: Path) -> None:
    shell = CliRunner()
    copied = Path(shutil.copytree(folder, tmp_path / "copied"))
    victim = sorted(copied.glob("*.h5"))[4]
    data = bytearray(victim.read_bytes())
    data[len(data) // 2] ^= 0x01
    victim.write_bytes(data)
    (copied / "stranger.h5").write_bytes(b"not a record")
    notes = next(copied.glob("*A-01*.notes"))
    notes.write_bytes(notes.read_bytes().replace(b"dropped", b"stepped"))
    done = shell.invoke(midspan, ["report", str(copied), "--out", str(tmp_path / "out")])
    assert done.exit_code == 1 and len(done.stderr.strip().splitlines()) == 3, done.stderr
    assert "altered after it was sealed" in done.stderr and "stranger.h5" in done.stderr
    assert "altered after it was written" in done.stderr
    page = next((tmp_path / "out").glob("*.html")).read_text("utf-8")
    assert page.count("Left out:") == 2 and "A-04" in page
    again = shell.invoke(midspan, ["report", str(folder), "--out", str(tmp_path / "out")])
    assert again.exit_code == 1 and "--force overwrites" in again.stderr
    for words in (["report", str(tmp_path / "nowhere")], ["report", str(tmp_path)]):
        refused = shell.invoke(midspan, words)
        assert refused.exit_code == 1 and len(refused.stderr.strip().splitlines()) == 1
