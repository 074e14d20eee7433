"""An unclean end is known to the next daemon of that frame, whatever its data folder."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from tempfile import TemporaryDirectory

import pytest

from daq.cards.load import example_path, load_frame
from daq.station.marks import RunningMarks
from daq.station.places import Places, places_for
from daq.station.supervisor import Outfit, Supervisor


@pytest.fixture
def root(monkeypatch: pytest.MonkeyPatch) -> Iterator[Path]:
    """A short path, since a socket's path has room for 107 bytes."""
    with TemporaryDirectory(prefix="ms-") as short:
        monkeypatch.setenv("MIDSPAN_RUNTIME", short)
        yield Path(short)


def made(name: str, data: Path) -> Places:
    places = places_for(name, data)
    places.make()
    return places


def test_another_data_folder_does_not_hide_an_unclean_end(root: Path) -> None:
    first, second = made("lane", root / "a"), made("lane", root / "b")
    assert RunningMarks(first).set() == ""
    assert RunningMarks(second).stand()
    assert str(root / "a") in RunningMarks(second).where_else() and RunningMarks(first).where_else() == ""
    assert not RunningMarks(made("other lane", root / "b")).stand()


def test_an_orderly_end_clears_both(root: Path) -> None:
    places = made("lane", root / "a")
    marks = RunningMarks(places)
    marks.set()
    marks.clear()
    assert not marks.stand() and not places.frame_mark.exists() and not places.running_mark.exists()


def test_without_a_place_for_the_twin_the_mark_beside_the_data_serves_and_that_is_said(
    root: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (root / "file").touch()
    places = made("lane", root / "a")
    monkeypatch.delenv("MIDSPAN_RUNTIME")
    monkeypatch.setenv("XDG_STATE_HOME", str(root / "file"))
    line = RunningMarks(places).set()
    assert "set XDG_STATE_HOME" in line and RunningMarks(places).stand()


def test_the_twin_outlives_a_reboot_and_is_this_computers(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.delenv("MIDSPAN_RUNTIME", raising=False)
    monkeypatch.setenv("XDG_STATE_HOME", str(tmp_path))
    twin = Places("lane", Path("/run/user/1/midspan/lane"), tmp_path / "data").frame_mark
    assert twin.parent == tmp_path / "midspan" and twin.name.startswith("lane@")


def test_scratch_of_a_dead_archivist_goes_at_the_next_start_and_nothing_else(root: Path) -> None:
    places = made("kiln-lane-demo", root / "a")
    for name in ("run-0001", "journal-0000000000000001"):
        (places.spool / name).mkdir()
        (places.spool / name / "file").write_bytes(b"x")
    ring = places.ring(1)
    ring.write_bytes(b"x")
    outfit = Outfit(load_frame(example_path("kiln-lane-demo.toml")), places)
    Supervisor(outfit, lambda _: None)._sweep()
    assert [path.name for path in places.spool.iterdir()] == ["journal-0000000000000001"] and ring.exists()
