"""Fracture origins as written at the microscope: a code, where it lies, and the joiners between several.

Source: NIST fracture pages (ceramics.nist.gov webbook, "Miscellaneous or Mixed Origins", read 2026) for the joiners
and the suffixes v and s: `&` primary and secondary, `/` either of the two, `+` linked to one larger flaw, `?` not
certain, `-` not examined. The codes below are of ASTM C1322 and NIST SP 960-16e2, from memory; own codes and plain
words are as good.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from enum import Enum
from types import MappingProxyType

TEXT_MAX = 60
TERMS_MAX = 4
NOT_EXAMINED, NOT_IDENTIFIED = "-", "?"

CODES = MappingProxyType({
    "P": "pore", "PR": "porous region", "PS": "porous seam", "A": "agglomerate", "I": "inclusion",
    "CI": "compositional inhomogeneity", "LG": "large grain", "CK": "crack", "MD": "machining damage",
    "HD": "handling damage", "PT": "pit", "SV": "surface void",
})  # fmt: skip


class Lies(Enum):
    """Where the flaw lies; by the last letter of a code."""

    VOLUME = "v"
    SURFACE = "s"
    EDGE = "e"
    UNSTATED = ""


class Joiner(Enum):
    """How two flaws belong together."""

    SECONDARY = "&"
    EITHER = "/"
    LINKED = "+"


@dataclass(frozen=True, slots=True)
class Term:
    """One flaw."""

    code: str
    lies: Lies
    certain: bool

    @property
    def words(self) -> str:
        """The code in plain words, as far as it is of the list."""
        where = {Lies.VOLUME: " in the volume", Lies.SURFACE: " at the surface", Lies.EDGE: " at the edge"}
        said = CODES.get(self.code, self.code) + where.get(self.lies, "")
        return said if self.certain else f"{said} (not certain)"


@dataclass(frozen=True, slots=True)
class Origin:
    """terms: primary first; joiners: one between each two. No terms: not examined, or not identified."""

    text: str
    terms: tuple[Term, ...] = ()
    joiners: tuple[Joiner, ...] = ()

    @property
    def population(self) -> str:
        """Flaw population for the statistics; empty where it is not sure. Secondary flaws do not count, linked ones
        make a population of their own."""
        if not self.terms or any(joiner is Joiner.EITHER for joiner in self.joiners):
            return ""
        kinds = [self.terms[0]]
        for joiner, term in zip(self.joiners, self.terms[1:], strict=True):
            if joiner is not Joiner.LINKED:
                break
            kinds.append(term)
        if not all(term.certain for term in kinds):
            return ""
        return "+".join(term.code + term.lies.value for term in kinds)

    @property
    def words(self) -> str:
        """For people."""
        if not self.terms:
            return {NOT_EXAMINED: "not examined", NOT_IDENTIFIED: "not identified"}.get(self.text, "")
        between = {Joiner.SECONDARY: " and, second, ", Joiner.EITHER: " or ", Joiner.LINKED: " linked with "}
        said = self.terms[0].words
        for joiner, term in zip(self.joiners, self.terms[1:], strict=True):
            said += between[joiner] + term.words
        return said


# A code of capitals (IFe: an iron inclusion) with v, s or e at its end, or a plain word in small letters.
_TERM = re.compile(r"(?:([A-Z][A-Za-z0-9]{0,7}?)([vse]?)|([a-z][a-z0-9 -]{1,23}))(\?)?")


def read_origin(text: str) -> Origin:
    """From what was typed. ValueError with one clear line where it is not understood."""
    plain = text.strip()
    if plain in ("", NOT_EXAMINED, NOT_IDENTIFIED):
        return Origin(plain)
    if len(plain) > TEXT_MAX:
        raise ValueError(f"origin = {plain[:20]!r}...: at most {TEXT_MAX} characters")
    parts = re.split(r"([&/+])", plain)
    words, joiners = parts[::2], tuple(Joiner(sign) for sign in parts[1::2])
    if len(words) > TERMS_MAX:
        raise ValueError(f"origin = {plain!r}: at most {TERMS_MAX} codes")
    return Origin(plain, tuple(_term(word.strip(), plain) for word in words), joiners)


def _term(word: str, whole: str) -> Term:
    found = _TERM.fullmatch(word)
    if found is None:
        raise ValueError(
            f"origin = {whole!r}: codes such as Pv, MDs or a word in small letters, joined by & (second), / (either) or"
            f" + (linked), ? behind what is not certain, - for not examined; {word!r} is none"
        )
    code, lies, plain, doubt = found.groups()
    return Term(plain.strip() if plain else code, Lies(lies or ""), not doubt)
