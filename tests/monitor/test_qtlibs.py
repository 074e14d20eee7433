"""Where Qt cannot run, the reason and the packages are named, all at once, before Qt is imported."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Set
from pathlib import Path

import pytest

from daq.errors import MidspanError
from monitor.qtlibs import ALWAYS, XCB, Surroundings, check_window, here


def computer(missing: Set[str] = frozenset(), **environment: str) -> Surroundings:
    def has(name: str) -> bool:
        return name not in missing

    return Surroundings(has, has, environment)


def test_everything_there_is_silent() -> None:
    check_window(computer(DISPLAY=":0"))
    check_window(computer(), offscreen=True)
    check_window(here(), offscreen=True)


def test_every_missing_library_is_named_with_its_package_in_one_line() -> None:
    with pytest.raises(MidspanError) as caught:
        check_window(computer({"libEGL.so.1", "libxkbcommon.so.0"}), offscreen=True)
    assert "libEGL.so.1, libxkbcommon.so.0" in str(caught.value)
    assert "apt-get install --no-install-recommends libegl1 libxkbcommon0" in str(caught.value)


def test_the_plugin_of_x11_is_asked_for_only_where_there_is_x11() -> None:
    with pytest.raises(MidspanError, match="libxcb-cursor0"):
        check_window(computer({"libxcb-cursor.so.0"}, DISPLAY=":0"))
    check_window(computer({"libxcb-cursor.so.0"}, WAYLAND_DISPLAY="wayland-0"))
    check_window(computer({"libxcb-cursor.so.0"}), offscreen=True)


def test_missing_python_packages_name_the_extra() -> None:
    with pytest.raises(MidspanError, match=r"pip install 'midspan\[gui\]'"):
        check_window(computer({"PySide6"}, DISPLAY=":0"))


def test_no_display_names_what_works_without_one() -> None:
    with pytest.raises(MidspanError, match="--terminal"):
        check_window(computer())


def test_the_setup_script_knows_the_same_libraries() -> None:
    script = (Path(__file__).parents[2] / ".ci" / "libraries").read_text("utf-8")
    for library, package in ALWAYS.items():
        assert f"need {library} {package}" in script
    assert not set(ALWAYS) & set(XCB)


@pytest.mark.slow
def test_the_command_says_it_in_clear_lines_and_fails() -> None:
    hidden = ("DISPLAY", "WAYLAND_DISPLAY", "QT_QPA_PLATFORM")
    kept = {name: value for name, value in os.environ.items() if name not in hidden}
    command = [sys.executable, "-m", "daq.cli.entry", "watch", "nothing.h5"]
    done = subprocess.run(command, env=kept, capture_output=True, text=True, check=False)
    assert done.returncode == 1 and "there is no display" in done.stderr and "Traceback" not in done.stderr
