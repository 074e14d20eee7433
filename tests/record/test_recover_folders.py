"""Recovery touches journals only: whatever else it is pointed at stays as it is, byte for byte."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from daq.errors import RecordingError
from daq.record.recover import recover
from tests.record.synthetic_run import demo_reduce


def contents(folder: Path) -> dict[str, bytes]:
    return {str(path.relative_to(folder)): path.read_bytes() for path in folder.rglob("*") if path.is_file()}


@pytest.mark.parametrize(
    "names",
    [
        (),
        ("letter.txt",),
        ("sub/letter.txt",),
        ("checkpoint",),
        ("lock", "checkpoint"),
        ("segment-00000001",),
        ("segment-00000001", "checkpoint", "lock"),
        ("rebuilding/letter.txt",),
        ("spare-parts.txt",),
    ],
    ids=str,
)
def test_a_folder_that_is_no_journal_is_refused_and_not_touched(
    names: tuple[str, ...], tmp_path: Path
) -> None:
    folder = tmp_path / "things"
    folder.mkdir()
    for name in names:
        (folder / name).parent.mkdir(exist_ok=True)
        (folder / name).write_bytes(b"mine")
    before = contents(folder)
    with pytest.raises(RecordingError, match="is not a journal"):
        recover(folder, tmp_path / "out", reduce=demo_reduce)
    assert contents(folder) == before and folder.is_dir()


def test_a_folder_named_like_a_journal_with_strange_files_is_refused(tmp_path: Path) -> None:
    folder = tmp_path / "journal-0000000000000001"
    folder.mkdir()
    (folder / "letter.txt").write_bytes(b"mine")
    with pytest.raises(RecordingError, match="is not a journal"):
        recover(folder, tmp_path / "out", reduce=demo_reduce)
    assert contents(folder) == {"letter.txt": b"mine"}


def test_a_journal_begun_and_never_written_is_cleared_away(tmp_path: Path) -> None:
    folder = tmp_path / "journal-0000000000000001"
    folder.mkdir()
    (folder / "lock").touch()
    assert recover(folder, tmp_path / "out", reduce=demo_reduce) == ()
    assert not folder.exists()


def test_somebodys_file_in_a_journal_outlives_its_recovery(journal: Path, tmp_path: Path) -> None:
    mine = tmp_path / "j"
    shutil.copytree(journal, mine)
    (mine / "letter.txt").write_bytes(b"mine")
    (mine / "segment-of-mine").write_bytes(b"mine too")
    assert len(recover(mine, tmp_path / "out", reduce=demo_reduce)) == 2
    assert contents(mine) == {"letter.txt": b"mine", "segment-of-mine": b"mine too"}
    with pytest.raises(RecordingError, match="is not a journal"):
        recover(mine, tmp_path / "out", reduce=demo_reduce)


def test_a_file_or_nothing_is_no_journal(tmp_path: Path) -> None:
    (tmp_path / "file").touch()
    for name in ("file", "nothing"):
        with pytest.raises(RecordingError, match="no journal at"):
            recover(tmp_path / name, tmp_path / "out", reduce=demo_reduce)


def test_a_half_removed_journal_is_cleared_by_the_next_recovery(journal: Path, tmp_path: Path) -> None:
    """Killed between two removals, at every one of them."""
    first = tmp_path / "first"
    shutil.copytree(journal, first)
    recover(first, tmp_path / "out", reduce=demo_reduce, keep=True)
    segments = sorted(path.name for path in first.iterdir() if path.name.startswith("segment-"))
    for removed in range(1, len(segments) + 1):
        again = tmp_path / f"journal-{removed:016x}"
        shutil.copytree(first, again)
        for name in segments[:removed]:
            (again / name).unlink()
        said: list[object] = []
        recover(again, tmp_path / "out", reduce=demo_reduce, report=said.append)
        assert not again.exists(), said
