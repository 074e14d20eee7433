"""Places: private folders, socket paths that fit, one root for daemon and stop line."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

from daq.errors import MidspanError
from daq.station import stopline
from daq.station.places import places_for, private_folder


def test_runtime_and_stop_line_agree(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setenv("MIDSPAN_RUNTIME", str(tmp_path))
    assert places_for("f", tmp_path).stop_socket == stopline.runtime_root() / "f" / "stop"
    monkeypatch.delenv("MIDSPAN_RUNTIME")
    monkeypatch.delenv("XDG_RUNTIME_DIR", raising=False)
    assert places_for("f", tmp_path).stop_socket == stopline.runtime_root() / "f" / "stop"


def test_a_socket_path_that_is_too_long_is_refused(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setenv("MIDSPAN_RUNTIME", str(tmp_path / ("x" * 100)))
    with pytest.raises(MidspanError, match="at most 107"):
        places_for("f", tmp_path)


def test_private_folders_are_closed_to_others(tmp_path: Path) -> None:
    folder = tmp_path / "open"
    folder.mkdir(mode=0o777)
    os.chmod(folder, 0o777)
    private_folder(folder)
    assert folder.stat().st_mode & 0o777 == 0o700


def test_a_symbolic_link_is_no_runtime_folder(tmp_path: Path) -> None:
    (tmp_path / "real").mkdir()
    (tmp_path / "link").symlink_to(tmp_path / "real")
    with pytest.raises(MidspanError, match="not a folder of this user"):
        private_folder(tmp_path / "link")


def test_stop_line_says_so_when_nobody_answers(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setenv("MIDSPAN_RUNTIME", str(tmp_path))
    assert stopline.running_frames() == []
    assert stopline.send_stop("no-frame", "test") is False
