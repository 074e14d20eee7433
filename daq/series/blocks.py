"""Blocks a report is made of: plain values that HTML and PDF show alike. Knows nothing of bars."""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum
from typing import TypeAlias


class Tone(Enum):
    """How loud a line is. Never by colour alone: each has its own word or sign."""

    PLAIN = "plain"
    CAUTION = "caution"
    LOUD = "loud"


@dataclass(frozen=True, slots=True)
class Lines:
    """Paragraphs, one a line."""

    lines: tuple[str, ...]
    tone: Tone = Tone.PLAIN


@dataclass(frozen=True, slots=True)
class Facts:
    """Name and value beside each other."""

    rows: tuple[tuple[str, str], ...]


@dataclass(frozen=True, slots=True)
class Grid:
    """A table. shares: relative widths of the columns; text: places of the columns that hold words, not numbers."""

    columns: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    shares: tuple[float, ...]
    text: frozenset[int] = frozenset({0})


@dataclass(frozen=True, slots=True)
class Picture:
    """A figure by its name, with its words."""

    name: str
    caption: str


Block: TypeAlias = Lines | Facts | Grid | Picture


@dataclass(frozen=True, slots=True)
class Section:
    """A heading and what stands below it."""

    title: str
    blocks: tuple[Block, ...]


@dataclass(frozen=True, slots=True)
class Report:
    """marks: what stands on every page (simulated, incomplete)."""

    title: str
    subtitle: str
    marks: tuple[str, ...]
    sections: tuple[Section, ...]
