"""Can the window be opened here? Says the real reason and the exact packages, before Qt ends the process over it.

Looks at what Qt will load; imports Qt only when all of it is there.
"""

from __future__ import annotations

import ctypes
import importlib.util
import os
from collections.abc import Callable, Mapping
from dataclasses import dataclass

from daq.errors import MidspanError

ALWAYS = {
    "libEGL.so.1": "libegl1",
    "libGL.so.1": "libgl1",
    "libxkbcommon.so.0": "libxkbcommon0",
    "libdbus-1.so.3": "libdbus-1-3",
    "libfontconfig.so.1": "libfontconfig1",
    "libglib-2.0.so.0": "libglib2.0-0",
}
# What Qt's xcb platform plugin links to beyond these (Qt 6.5 and later also need libxcb-cursor).
XCB = {
    "libxcb-cursor.so.0": "libxcb-cursor0",
    "libxcb-icccm.so.4": "libxcb-icccm4",
    "libxcb-image.so.0": "libxcb-image0",
    "libxcb-keysyms.so.1": "libxcb-keysyms1",
    "libxcb-randr.so.0": "libxcb-randr0",
    "libxcb-render-util.so.0": "libxcb-render-util0",
    "libxcb-shape.so.0": "libxcb-shape0",
    "libxcb-sync.so.1": "libxcb-sync1",
    "libxcb-xfixes.so.0": "libxcb-xfixes0",
    "libxcb-xkb.so.1": "libxcb-xkb1",
    "libxkbcommon-x11.so.0": "libxkbcommon-x11-0",
    "libX11-xcb.so.1": "libx11-xcb1",
}
MODULES = {"PySide6": "PySide6-Essentials", "pyqtgraph": "pyqtgraph"}
PIP_LINE = "pip install 'midspan[gui]'"
APT_LINE = "sudo apt-get install --no-install-recommends "


@dataclass(frozen=True, slots=True)
class Surroundings:
    """What is asked of the computer: which Python modules and shared libraries there are, and its environment."""

    has_module: Callable[[str], bool]
    has_library: Callable[[str], bool]
    environment: Mapping[str, str]


def here() -> Surroundings:
    """This computer."""
    return Surroundings(lambda name: importlib.util.find_spec(name) is not None, loads, os.environ)


def loads(library: str) -> bool:
    """Whether the dynamic linker finds it."""
    try:
        ctypes.CDLL(library)
    except OSError:
        return False
    return True


def check_window(found: Surroundings, *, offscreen: bool = False) -> None:
    """Raises MidspanError with everything that is missing, and what to do, in one line each."""
    problems = [*_modules(found), *_libraries(found, offscreen=offscreen)]
    if not offscreen and not _display(found):
        problems.append(
            "there is no display (DISPLAY and WAYLAND_DISPLAY are not set): use --terminal, or --picture with a record"
        )
    if problems:
        raise MidspanError("\n".join(f"the window cannot be opened: {problem}" for problem in problems))


def _modules(found: Surroundings) -> list[str]:
    missing = [package for module, package in MODULES.items() if not found.has_module(module)]
    return [f"Python packages {', '.join(missing)} are missing: {PIP_LINE}"] if missing else []


def _libraries(found: Surroundings, *, offscreen: bool) -> list[str]:
    platform = found.environment.get("QT_QPA_PLATFORM", "")
    over_x11 = platform.startswith("xcb") or (not platform and not found.environment.get("WAYLAND_DISPLAY"))
    wanted = dict(ALWAYS)
    if over_x11 and not offscreen and _display(found):
        wanted |= XCB
    missing = {library: package for library, package in wanted.items() if not found.has_library(library)}
    if not missing:
        return []
    return [f"shared libraries {', '.join(missing)} are missing: {APT_LINE}{' '.join(missing.values())}"]


def _display(found: Surroundings) -> bool:
    platform = found.environment.get("QT_QPA_PLATFORM", "")
    headless = platform.startswith(("offscreen", "minimal", "vnc", "linuxfb", "eglfs"))
    return headless or any(found.environment.get(name) for name in ("DISPLAY", "WAYLAND_DISPLAY"))
