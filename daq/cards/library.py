"""The shipped method cards and a user's own: found by name, own ones first. Reads cards; changes none.

A shipped card holds facts and figures of a standard, each with its mark; its [expected] table is an example.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from importlib import resources
from pathlib import Path

from daq.cards.faults import Fault, raise_faults, show
from daq.cards.load import load_method
from daq.cards.method import Clause, MethodCard
from daq.cards.tree import read_tree
from daq.errors import CardError

FILES_MAX = 1000  # a folder with more method cards than this is the wrong folder
NAMES_SHOWN_MAX = 6
OTHER_KINDS = ("frame", "series")  # such cards may lie in the same folder


@dataclass(frozen=True, slots=True)
class Found:
    """One method card; own: not shipped. hides: a shipped card of the same name stands behind it."""

    card: MethodCard
    path: Path
    own: bool
    hides: bool = False


@dataclass(frozen=True, slots=True)
class Library:
    """Every method card by name, and the fault lines of own cards that cannot be read."""

    methods: tuple[Found, ...]
    problems: tuple[str, ...]


def methods_folder() -> Path:
    """Folder of the shipped method cards."""
    return Path(str(resources.files("daq.cards") / "methods"))


def read_library(folders: Iterable[Path] = ()) -> Library:
    """All methods, sorted by name; a faulty own card is told and does not hide the others."""
    shipped = {key(path.stem): path for path in _files(methods_folder())}
    own, problems = _own(folders)
    merged = {name: Found(load_method(path), path, own=False) for name, path in shipped.items()}
    for name, (card, path) in own.items():
        merged[name] = Found(card, path, own=True, hides=name in shipped)
    told = tuple(line for lines in problems.values() for line in lines)
    return Library(tuple(merged[name] for name in sorted(merged)), told)


def find_method(name: str, folders: Iterable[Path] = ()) -> Found:
    """A method by its name, or by the path of its file; own cards come before shipped ones.

    CardError: no such method (nearest names told), or the own card of that name is faulty.
    """
    if name.endswith(".toml") or Path(name).is_file():
        return Found(load_method(Path(name)), Path(name), own=True)
    shipped = {key(path.stem): path for path in _files(methods_folder())}
    own, problems = _own(folders)
    wanted = key(name)
    if wanted in own:
        card, path = own[wanted]
        return Found(card, path, own=True, hides=wanted in shipped)
    if wanted in problems:
        raise_faults(problems[wanted])
    if wanted in shipped:
        return Found(load_method(shipped[wanted]), shipped[wanted], own=False)
    raise CardError((_unknown(name, {**shipped, **{at: path for at, (_, path) in own.items()}}),))


def clauses_by_key(card: MethodCard) -> dict[str, Clause]:
    """The clause of each value; the last one counts where a key has several."""
    return {clause.key: clause for clause in card.clauses}


def key(name: str) -> str:
    """Names are compared without regard to case and to the kind of gap."""
    return name.strip().casefold().replace(" ", "-").replace("_", "-")


def _own(
    folders: Iterable[Path],
) -> tuple[dict[str, tuple[MethodCard, Path]], dict[str, tuple[str, ...]]]:
    """Own cards by name, and the fault lines of faulty ones by the name of their file; the first folder wins."""
    cards: dict[str, tuple[MethodCard, Path]] = {}
    problems: dict[str, tuple[str, ...]] = {}
    for path in (path for folder in folders for path in _files(folder)):
        try:
            if read_tree(path).get("card") not in OTHER_KINDS:
                card = load_method(path)
                cards.setdefault(key(card.name), (card, path))
        except CardError as error:
            problems[key(path.stem)] = error.problems
    return cards, problems


def _unknown(name: str, known: Mapping[str, Path]) -> str:
    wanted = key(name)
    near = [at for at in known if wanted and wanted in at]
    near += [at for at in difflib.get_close_matches(wanted, list(known), n=4, cutoff=0.5) if at not in near]
    shown = ", ".join(known[at].stem for at in near[:NAMES_SHOWN_MAX])
    do = f"choose one of {shown}" if near else "see `midspan methods`"
    return Fault(("method",), "the name or the file of a method card", do, show(name)).line("methods", {})


def _files(folder: Path) -> list[Path]:
    """The TOML files of a folder; CardError when it is none, or holds far too many."""
    files = sorted(folder.glob("*.toml"))
    fault = None
    if not folder.is_dir():
        fault = Fault(("folder",), "a folder of method cards", "correct the path", show(str(folder)))
    elif len(files) > FILES_MAX:
        allowed = f"at most {FILES_MAX} cards"
        fault = Fault(("folder",), allowed, "choose the right folder", show(str(folder)))
    if fault is not None:
        raise CardError((fault.line("methods", {}),))
    return files
