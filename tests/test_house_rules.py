"""The house checks itself: who may import whom, purity of the core, lengths, words that may not be used."""

from __future__ import annotations

import ast
import re
import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
PACKAGES = ("daq", "drivers", "monitor", "simulator")
FILES = sorted(path for package in PACKAGES for path in (ROOT / package).rglob("*.py"))

# room -> rooms of ours it may import (longest prefix wins); daq.errors and daq.version are leaves open to all
MAY_IMPORT: dict[str, tuple[str, ...]] = {
    "daq.stream": (),
    "daq.mechanics": (),
    "daq.cards": (),
    "daq.watch": ("daq.stream", "daq.mechanics", "daq.cards"),
    "daq.results": ("daq.stream", "daq.mechanics", "daq.cards"),
    "daq.series": ("daq.stream", "daq.mechanics", "daq.cards", "daq.results"),
    "daq.record": ("daq.stream", "daq.cards"),
    "daq.bench": ("daq.stream", "daq.watch", "daq.cards", "drivers"),
    "daq.recompute": (
        "daq.record.read",
        "daq.record.rows",
        "daq.record.head",
        "daq.record.texts",
        "daq.watch",
        "daq.results",
        "daq.stream",
        "daq.cards",
        "daq.bench.core",
        "daq.bench.memory",
        "daq.bench.replayed",
        "drivers",
    ),
    "daq.station": ("daq", "drivers.registry"),
    "daq.cli": ("daq", "drivers", "monitor", "simulator"),
    "drivers": ("daq.stream", "daq.cards", "daq.record.read", "daq.watch.values"),
    "simulator": ("drivers", "daq.mechanics", "daq.stream", "daq.cards"),
    "simulator.scenario": ("simulator", "drivers", "daq"),
    "monitor": ("daq.stream", "daq.cards", "daq.mechanics", "daq.record.read"),
}
LEAVES = ("daq.errors", "daq.version")

PURE = (
    "daq.watch",
    "daq.mechanics",
    "daq.results",
    "daq.bench.account",
    "daq.bench.core",
    "daq.bench.memory",
    "daq.bench.messages",
    "daq.bench.replayed",
    "daq.recompute.comparing",
    "daq.recompute.decoding",
    "daq.recompute.rewatch",
    "monitor.presenter",
)
PURE_FILES = (
    "daq.stream.entry",
    "daq.stream.payloads",
    "daq.stream.block",
    "daq.stream.clock",
    "daq.stream.updates",
    "daq.stream.thin",
    "daq.station.sitting",
    "daq.station.seat",
    "daq.station.follower",
    "drivers.lines",
    "drivers.manylines",
    "drivers.packets",
    "drivers.motion",
    "drivers.checks",
)
IMPURE_MODULES = {
    "socket",
    "threading",
    "asyncio",
    "time",
    "os",
    "random",
    "logging",
    "h5py",
    "serial",
    "subprocess",
}

FILE_LINES_MAX = 500
FUNCTION_LINES_MAX = 60
TOP_LOOPS: set[str] = {
    "daq.record.sealing"
}  # where `except Exception` may stand: a failing reduction must not cost a record


def module_name(path: Path) -> str:
    parts = path.relative_to(ROOT).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def imports(path: Path) -> Iterator[tuple[str, int]]:
    for node in ast.walk(ast.parse(path.read_text("utf-8"))):
        if isinstance(node, ast.Import):
            yield from ((alias.name, node.lineno) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}:{node.lineno}: relative import"
            yield from ((f"{node.module}.{alias.name}", node.lineno) for alias in node.names)


def within(name: str, rooms: tuple[str, ...]) -> bool:
    return any(name == room or name.startswith(room + ".") for room in rooms)


@pytest.mark.parametrize("path", FILES, ids=module_name)
def test_imports_follow_the_rule(path: Path) -> None:
    name = module_name(path)
    rooms = [room for room in MAY_IMPORT if within(name, (room,))]
    if not rooms:
        return
    room = max(rooms, key=len)
    for imported, line in imports(path):
        if not within(imported, PACKAGES) or within(imported, LEAVES):
            continue
        assert within(imported, (room, *MAY_IMPORT[room])), f"{name}:{line} may not import {imported}"


@pytest.mark.parametrize(
    "path", [p for p in FILES if within(module_name(p), PURE + PURE_FILES)], ids=module_name
)
def test_the_core_is_pure(path: Path) -> None:
    for imported, line in imports(path):
        assert imported.split(".")[0] not in IMPURE_MODULES, f"{module_name(path)}:{line} imports {imported}"


@pytest.mark.parametrize("path", FILES, ids=module_name)
def test_files_and_functions_stay_short(path: Path) -> None:
    text = path.read_text("utf-8")
    assert text.count("\n") <= FILE_LINES_MAX
    for node in ast.walk(ast.parse(text)):
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
            assert node.end_lineno is not None
            length = node.end_lineno - node.lineno + 1
            assert length <= FUNCTION_LINES_MAX, f"{path.name}:{node.lineno} {node.name}: {length} lines"


@pytest.mark.parametrize("path", FILES, ids=module_name)
def test_every_module_says_what_it_is(path: Path) -> None:
    text = path.read_text("utf-8")
    if text.strip():
        assert ast.get_docstring(ast.parse(text)), f"{path}: no module docstring"


@pytest.mark.parametrize("path", FILES, ids=module_name)
def test_no_wall_clock_no_print_no_bare_queue_no_broad_except(path: Path) -> None:
    for node in ast.walk(ast.parse(path.read_text("utf-8"))):
        if isinstance(node, ast.Call):
            called = ast.unparse(node.func)
            assert called not in ("time.time", "print"), f"{path}:{node.lineno}: {called}"
            assert not (called.endswith("queue.Queue") and not node.args), (
                f"{path}:{node.lineno}: unbounded queue"
            )
        if isinstance(node, ast.ExceptHandler) and node.type is not None:
            broad = ast.unparse(node.type) in ("Exception", "BaseException")
            assert not broad or module_name(path) in TOP_LOOPS, (
                f"{path}:{node.lineno}: except {ast.unparse(node.type)}"
            )


def test_the_project_speaks_of_itself_alone() -> None:
    """No machine's paths, no unfinished business: in every file that is tracked."""
    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=True).stdout
    path_of_a_machine = re.compile(r"(?<![\w.~$}\)])/(?:root|home|tmp)/\w")
    unfinished = re.compile(r"\b(TODO|FIXME|XXX)\b|raise NotImplementedError")
    for name in listed.splitlines():
        path = ROOT / name
        if path.suffix not in (".py", ".md", ".toml", ".service", ".rules", ".txt", "") or not path.is_file():
            continue
        if path == Path(__file__):
            continue
        for number, line in enumerate(path.read_text("utf-8", "replace").splitlines(), 1):
            assert not path_of_a_machine.search(line), f"{name}:{number}: {line.strip()}"
            assert not unfinished.search(line), f"{name}:{number}: {line.strip()}"


def test_every_command_explains_itself() -> None:
    """--help of every command names an example."""
    from click.testing import CliRunner

    from daq.cli.root import COMMANDS, midspan

    for name in COMMANDS:
        if name == "stop":
            continue
        shown = CliRunner().invoke(midspan, [name, "--help"])
        assert shown.exit_code == 0, shown.output
        assert "Example: midspan " + name in shown.output


def test_no_paper_outside_the_repository_is_named() -> None:
    """A reader could not look it up."""
    papers = re.compile(r"\b(job|design|reliability)[.]md|check-values|[Jj]ob map\b|[Cc]heck values [0-9]")
    tracked = subprocess.run(
        ["git", "ls-files", "-z"], cwd=ROOT, capture_output=True, text=True, check=False
    ).stdout
    texts = [
        ROOT / name for name in tracked.split("\0") if name.endswith((".py", ".md", ".toml", ".c", ".conf"))
    ]
    named = [
        f"{path.relative_to(ROOT)}:{number}: {found.group()}"
        for path in texts
        if path != Path(__file__).resolve() and path.exists()
        for number, line in enumerate(path.read_text("utf-8").splitlines(), start=1)
        if (found := papers.search(line)) is not None
    ]
    assert named == []
