"""Names that reach the file system: series, specimens, frames, methods. Refuses; never repairs a name."""

from __future__ import annotations

NAME_CHARACTERS_MAX = 64

# Device names of one wide-spread system: a record copied there under such a name could not be opened.
RESERVED = frozenset(
    {"con", "prn", "aux", "nul"} | {f"com{n}" for n in range(10)} | {f"lpt{n}" for n in range(10)}
)
ALLOWED = frozenset("ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789_.-")


def name_fault(text: str) -> str | None:
    """Why this text may not become a part of a file name; None when it may."""
    if not 1 <= len(text) <= NAME_CHARACTERS_MAX:
        return f"a name has 1 to {NAME_CHARACTERS_MAX} characters, this one has {len(text)}"
    if not ALLOWED.issuperset(text):
        return "a name is made of the letters A-Z and a-z, digits, and _ . - only; no blanks, no separators"
    if text[0] in "._-":
        return "a name begins with a letter or a digit"
    if text[-1] == ".":
        return "a name does not end with a point"
    if text.split(".", 1)[0].lower() in RESERVED:
        return "this name is reserved by an operating system; choose another"
    return None


def has_control(text: str) -> bool:
    """True when a text holds characters that would garble a terminal, a log line or a file name."""
    return any(ord(char) < 0x20 or 0x7F <= ord(char) <= 0x9F or char in INVISIBLE for char in text)


# Zero-width and direction-changing characters: two names that look alike would not be the same.
INVISIBLE = frozenset(
    chr(code) for code in (*range(0x200B, 0x2010), *range(0x2028, 0x202F), *range(0x2060, 0x2070), 0xFEFF)
)
