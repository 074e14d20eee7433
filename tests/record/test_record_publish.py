"""Names are given once, copies are read back, lists survive a torn line."""

from __future__ import annotations

import errno
import os
import subprocess
from pathlib import Path

import pytest

from daq.errors import RecordingError
from daq.record.mark import MARK_NAME, Mark, read_mark, write_mark
from daq.record.publish import (
    SUMS_NAME,
    add_sum,
    copy_verified,
    make_folder,
    publish_new,
    read_sums,
    sha256_of,
)


def test_a_taken_name_stays_as_it_is(tmp_path: Path) -> None:
    (tmp_path / "new").write_text("mine")
    (tmp_path / "final").write_text("theirs")
    with pytest.raises(FileExistsError):
        publish_new(tmp_path / "new", tmp_path / "final")
    assert (tmp_path / "final").read_text() == "theirs" and (tmp_path / "new").exists()
    publish_new(tmp_path / "new", tmp_path / "other")
    assert (tmp_path / "other").read_text() == "mine" and not (tmp_path / "new").exists()


@pytest.fixture
def no_hard_links(monkeypatch: pytest.MonkeyPatch) -> None:
    """A file system such as those of memory sticks."""

    def refuse(*_: object) -> None:
        raise OSError(errno.EPERM, "no hard links here")

    monkeypatch.setattr(os, "link", refuse)


@pytest.mark.usefixtures("no_hard_links")
def test_without_hard_links_names_are_safe_too(tmp_path: Path) -> None:
    test_a_taken_name_stays_as_it_is(tmp_path)
    (tmp_path / "again").write_text("mine")
    (tmp_path / "claimed").touch()  # left by a kill between the claim and the rename
    publish_new(tmp_path / "again", tmp_path / "claimed")
    assert (tmp_path / "claimed").read_text() == "mine"


def test_a_copy_is_made_once_and_never_over_another_file(tmp_path: Path) -> None:
    source = tmp_path / "a"
    source.write_bytes(b"record")
    digest = sha256_of(source)
    target = tmp_path / "share" / "kiln" / "a"
    for _ in range(2):
        copy_verified(source, target, digest)
    assert target.read_bytes() == b"record" and [path.name for path in target.parent.iterdir()] == ["a"]
    target.write_bytes(b"other")
    with pytest.raises(RecordingError, match="nothing was overwritten"):
        copy_verified(source, target, digest)
    assert target.read_bytes() == b"other"


def test_a_copy_that_reads_back_wrong_is_not_left_behind(tmp_path: Path) -> None:
    (tmp_path / "a").write_bytes(b"record")
    with pytest.raises(RecordingError, match="another digest"):
        copy_verified(tmp_path / "a", tmp_path / "b", "0" * 64)
    assert [path.name for path in tmp_path.iterdir()] == ["a"]


def test_sums_survive_a_torn_line_and_a_repeated_one(tmp_path: Path) -> None:
    for name in ("one", "two"):
        (tmp_path / name).write_text(name)
    first, second = sha256_of(tmp_path / "one"), sha256_of(tmp_path / "two")
    add_sum(tmp_path, first, "one")
    with open(tmp_path / SUMS_NAME, "a") as file:
        file.write(second[:30])
    add_sum(tmp_path, second, "two")
    add_sum(tmp_path, second, "two")
    assert read_sums(tmp_path) == [(first, "one"), (second, "two")]
    checked = subprocess.run(
        ["sha256sum", "-c", SUMS_NAME], cwd=tmp_path, capture_output=True, text=True, check=True
    )
    assert checked.stdout.split() == ["one:", "OK", "two:", "OK"]


def test_new_folders_are_made_all_the_way(tmp_path: Path) -> None:
    make_folder(tmp_path / "a" / "b" / "c")
    make_folder(tmp_path / "a" / "b" / "c")
    assert (tmp_path / "a" / "b" / "c").is_dir()


@pytest.mark.parametrize(
    "text", ["", "{", "[]", '{"stream_id": 1}', '{"stream_id": "x", "needed_from": 1, "copies": []}']
)
def test_a_mark_that_cannot_be_trusted_is_no_mark(tmp_path: Path, text: str) -> None:
    write_mark(tmp_path, Mark(2**63 + 5, 17, ("kiln/a.h5",), "share"))
    assert read_mark(tmp_path) == Mark(2**63 + 5, 17, ("kiln/a.h5",), "share")
    (tmp_path / MARK_NAME).write_text(text)
    assert read_mark(tmp_path) is None
