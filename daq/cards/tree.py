"""Reads one small text file: bounded, UTF-8, TOML of bounded depth. Knows no cards; repairs nothing."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from pathlib import Path as FilePath
from typing import TypeAlias

from daq.cards.describe import Path
from daq.cards.faults import Fault, one_line
from daq.cards.names import has_control
from daq.errors import CardError

FILE_BYTES_MAX = 256 * 1024
DEPTH_MAX = 8
# tomllib's time grows with the square of the parts of one dotted key: 0.09 s for a line of this length.
LINE_CHARACTERS_MAX = 4096
# Here line ends and tabulators are meant; they go to a wire, never to a terminal.
WIRE_KEYS = frozenset(
    {"line_end", "reply_line_end", "separator", "label_separator", "prefix", "send", "reply", "start_command"}
)

Tree: TypeAlias = Mapping[str, object]


def read_text(path: FilePath) -> str:
    """The text of a small file; CardError with one line when it cannot be had."""
    # A named pipe or a device would be waited for, or read without end.
    if path.exists() and not (path.is_file() or path.is_dir()):
        raise _refused(path, "not a regular file", "a readable file", "correct the path")
    try:
        with path.open("rb") as file:
            data = file.read(FILE_BYTES_MAX + 1)
    except (OSError, ValueError) as error:
        cause = getattr(error, "strerror", None) or "not a usable file name"
        raise _refused(path, f"cannot be read ({cause})", "a readable file", "correct the path") from error
    if len(data) > FILE_BYTES_MAX:
        limit = f"at most {FILE_BYTES_MAX // 1024} KiB"
        raise _refused(
            path, f"more than {FILE_BYTES_MAX} bytes", limit, "split the file or choose the right one"
        )
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        what = f"byte {data[error.start]:#04x} at position {error.start} is not UTF-8"
        raise _refused(path, what, "UTF-8 text", "save the file as UTF-8 in your editor") from error


def read_tree(path: FilePath) -> Tree:
    """The parsed TOML of a small file, lists as tuples; CardError with one line when it is not TOML."""
    text = read_text(path)
    longest = max((len(line) for line in text.splitlines()), default=0)
    if longest > LINE_CHARACTERS_MAX:
        limit = f"at most {LINE_CHARACTERS_MAX} characters a line"
        raise _refused(path, f"a line of {longest} characters", limit, "break the line")
    try:
        tree = tomllib.loads(text)
    except (ValueError, RecursionError, OverflowError) as error:
        what = one_line(str(error)) if isinstance(error, tomllib.TOMLDecodeError) else "not readable"
        do = "correct the line; text stands in quotes, decimals have a point"
        raise _refused(path, what, "TOML text", do) from error
    if depth_of(tree) > DEPTH_MAX:
        limit = f"at most {DEPTH_MAX} tables or lists inside each other"
        raise _refused(path, "nested too deeply", limit, "flatten the card")
    frozen = _tuples(tree)
    assert isinstance(frozen, Mapping)
    return frozen


def depth_of(tree: object) -> int:
    """Tables and lists inside each other; counts no further than one past the limit."""
    level: list[object] = [tree]
    for depth in range(DEPTH_MAX + 2):
        level = [child for parent in level for child in _children(parent)]
        if not level:
            return depth
    return DEPTH_MAX + 1


def control_faults(tree: object, path: Path = ()) -> tuple[Fault, ...]:
    """Texts with control or invisible characters, outside the keys that speak to a wire."""
    if isinstance(tree, Mapping):
        pairs = [(str(key), value) for key, value in tree.items()]
        return tuple(fault for key, value in pairs for fault in control_faults(value, (*path, key)))
    if isinstance(tree, tuple):
        return tuple(fault for n, value in enumerate(tree) for fault in control_faults(value, (*path, n)))
    if isinstance(tree, str) and has_control(tree) and path[-1] not in WIRE_KEYS:
        return (Fault(path, "text without control or invisible characters", "type the text again"),)
    return ()


def _children(value: object) -> list[object]:
    if isinstance(value, Mapping):
        return list(value.values())
    return list(value) if isinstance(value, list | tuple) else []


def _tuples(value: object) -> object:
    if isinstance(value, Mapping):
        return {key: _tuples(child) for key, child in value.items()}
    return tuple(_tuples(child) for child in value) if isinstance(value, list) else value


def _refused(path: FilePath, value: str, limit: str, do: str) -> CardError:
    return CardError((Fault(("file",), limit, do, value).line(str(path), {}),))
