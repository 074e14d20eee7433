"""From files to cards. Every fault of a card is told at once, one complete line each; nothing is repaired.

A line reads  file: key = value: allowed range with unit: what to do.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass
from importlib import resources
from pathlib import Path as FilePath
from typing import Final, TypeVar

from pydantic import ValidationError

from daq.cards.base import Card
from daq.cards.describe import Path, allowed_at, node_at
from daq.cards.faults import Fault, faults_of, raise_faults, show
from daq.cards.frame import FrameCard
from daq.cards.method import MethodCard
from daq.cards.rules_fit import fit_faults
from daq.cards.rules_frame import frame_faults, parts_of, parts_of_card, row_faults
from daq.cards.rules_method import method_faults, method_parts, parts_of_method
from daq.cards.series import SeriesCard, Specimen
from daq.cards.sheet import read_sheet
from daq.cards.tree import Tree, control_faults, read_text, read_tree
from daq.errors import CardError

SomeCard = TypeVar("SomeCard", FrameCard, MethodCard, SeriesCard)
Found = TypeVar("Found")
KIND: Final[Mapping[type[Card], str]] = {FrameCard: "frame", MethodCard: "method", SeriesCard: "series"}


@dataclass(frozen=True, slots=True)
class LoadedSeries:
    """One sitting with everything it refers to. fixture: name of the fixture as fitted."""

    card: SeriesCard
    method: MethodCard
    specimens: tuple[Specimen, ...]
    fixture: str


def load_frame(path: FilePath | str) -> FrameCard:
    """Read and check a frame card; CardError with one line for every fault."""
    return _load(FrameCard, FilePath(path))


def load_method(path: FilePath | str) -> MethodCard:
    """Read and check a method card; CardError with one line for every fault."""
    return _load(MethodCard, FilePath(path))


def load_series(path: FilePath | str) -> LoadedSeries:
    """Read and check a series card, its method card and its bench sheet; the faults of all of them at once.

    Only the sheet waits for a readable method card: it says which columns a bar has.
    """
    path = FilePath(path)
    tree = read_tree(path)
    problems: list[str] = []
    card = _collected(problems, lambda: _checked(SeriesCard, tree, str(path)))
    method_name, sheet_name = tree.get("method"), tree.get("sheet")
    method = None
    if _is_series(tree) and isinstance(method_name, str) and method_name:
        method = _collected(problems, lambda: _method_of(path, method_name, card))
    specimens: tuple[Specimen, ...] = ()
    if method is not None and isinstance(sheet_name, str) and sheet_name:
        found = method
        specimens = _collected(problems, lambda: load_sheet(path.parent / sheet_name, found)) or ()
    raise_faults(problems)
    assert card is not None and method is not None and specimens
    return LoadedSeries(card, method, specimens, card.fixture)


def _method_of(path: FilePath, name: str, card: SeriesCard | None) -> MethodCard:
    """The method of a series with the material of the series; a shipped method has only an example of one."""
    shipped = not name.endswith(".toml") and not (path.parent / name).exists()
    if shipped:
        from daq.cards.library import find_method  # reads with this module

        method = find_method(name).card
    else:
        method = load_method(path.parent / name)
    if card is None:
        return method
    if card.expected is None:
        if shipped:
            allowed = (
                f"a table of this material, because the shipped method {method.name} has an example only"
            )
            fault = Fault(("expected",), allowed, "add [expected] with strength_mpa and modulus_gpa")
            raise CardError((fault.line(str(path), {}),))
        return method
    return check_method(method.model_copy(update={"expected": card.expected}), str(path))


def load_sheet(path: FilePath | str, method: MethodCard) -> tuple[Specimen, ...]:
    """Read and check a bench sheet for a method; CardError with one line for every fault of every cell."""
    path = FilePath(path)
    sheet = read_sheet(read_text(path), method)
    raise_faults(fault.line(str(path), {}) for fault in sheet.faults)
    return sheet.specimens


def check_frame(card: FrameCard, name: str = "frame card") -> FrameCard:
    """Cross rules of a frame card that did not come from a file (a resolved card of a record, a request)."""
    raise_faults(fault.line(name, card.model_dump()) for fault in _cross_faults(card))
    return card


def check_method(card: MethodCard, name: str = "method card") -> MethodCard:
    """Cross rules of a method card that did not come from a file."""
    raise_faults(fault.line(name, card.model_dump()) for fault in _cross_faults(card))
    return card


def check_fit(frame: FrameCard, method: MethodCard, fixture: str, name: str = "method card") -> None:
    """Refuse a method that cannot be run on this frame with this fixture; CardError with every reason."""
    tree = {**method.model_dump(), "fixture": fixture}
    raise_faults(fault.line(name, tree) for fault in fit_faults(frame, method, fixture))


def example_path(name: str) -> FilePath:
    """A shipped example by its file name, such as kiln-lane-a.toml."""
    path = examples_folder() / name
    if not path.is_file():
        known = ", ".join(sorted(file.name for file in examples_folder().iterdir()))
        raise CardError(
            (Fault(("example",), "one of " + known, "choose one", show(name)).line("examples", {}),)
        )
    return path


def examples_folder() -> FilePath:
    """Folder of the shipped examples, all of them invented."""
    return FilePath(str(resources.files("daq.cards") / "examples"))


def _load(model: type[SomeCard], path: FilePath) -> SomeCard:
    return _checked(model, read_tree(path), str(path))


def _checked(model: type[SomeCard], tree: Tree, file: str) -> SomeCard:
    kind = KIND[model]
    if tree.get("card") != kind:
        found = tree.get("card")
        do = f"add the line: card = '{kind}'" if found is None else f"choose a {kind} card"
        raise_faults(
            [Fault(("card",), f"'{kind}', because a {kind} card is wanted here", do).line(file, tree)]
        )
    faults = list(control_faults(tree))
    try:
        card = model.model_validate(tree)
    except ValidationError as error:
        faults.extend(faults_of(error, model))
        faults.extend(_rest(model, tree, {fault.path for fault in faults}))
    else:
        faults.extend(_cross_faults(card))
        if not faults:
            return card
    raise_faults(fault.line(file, tree) for fault in _ordered(faults, tree))
    raise AssertionError("a card without faults has been returned already")


def _cross_faults(card: Card) -> Iterator[Fault]:
    if isinstance(card, FrameCard):
        yield from frame_faults(parts_of_card(card))
        yield from row_faults(card)
    if isinstance(card, MethodCard):
        yield from method_faults(parts_of_method(card))


def _rest(model: type[Card], tree: Tree, faulty: set[Path]) -> Iterator[Fault]:
    """Cross rules on what is left of a card when its faulty keys are taken out.

    A rule that may have missed one of these keys is silent: a fault that is told must be true.
    """
    removed = {path for path in faulty if not allowed_at(model, path).startswith(("a table", "a list"))}
    known = {path[:-1] for path in removed if len(path) > 1 and node_at(model, path) is not None}
    mended = _without(tree, removed)
    assert isinstance(mended, Mapping)
    found: Iterable[Fault] = ()
    if model is FrameCard:
        found = frame_faults(parts_of(mended))
    if model is MethodCard:
        found = method_faults(method_parts(mended))
    yield from (fault for fault in found if fault.path not in faulty and fault.path[:-1] not in known)


def _without(tree: object, faulty: set[Path], at: Path = ()) -> object:
    """The tree without its faulty leaves; items of lists stay in place, so that numbers stay true."""
    if isinstance(tree, Mapping):
        kept = {key: value for key, value in tree.items() if (*at, key) not in faulty}
        return {key: _without(value, faulty, (*at, key)) for key, value in kept.items()}
    if isinstance(tree, tuple):
        return tuple(_without(value, faulty, (*at, number)) for number, value in enumerate(tree))
    return tree


def _ordered(faults: list[Fault], tree: Tree) -> list[Fault]:
    """In the order of the card's own tables, so that a person can work through the file."""
    places = {key: number for number, key in enumerate(tree)}
    return sorted(faults, key=lambda fault: places.get(str(fault.path[0]) if fault.path else "", len(places)))


def _is_series(tree: Tree) -> bool:
    return tree.get("card") == "series"


def _collected(problems: list[str], read: Callable[[], Found]) -> Found | None:
    """What was read, or None with its faults added to the problems."""
    try:
        return read()
    except CardError as error:
        problems.extend(error.problems)
        return None
