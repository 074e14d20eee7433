"""Front: the 512 bytes of text before the HDF5 part of a sealed record, with the digest of all the rest.

HDF5 readers skip it. It lets a damaged, cut or foreign file be told apart before HDF5 parses anything.
"""

from __future__ import annotations

from pathlib import Path

from daq.errors import RecordDamaged

FORMAT = "midspan plain record"
FORMAT_VERSION = 1
FRONT_BYTES = 512  # the smallest user block HDF5 allows


def front_block(digest: str, size_bytes: int) -> bytes:
    """The text before the HDF5 part: what this is, and the digest of everything after it."""
    text = (
        f"{FORMAT} {FORMAT_VERSION}\n"
        f"The HDF5 file begins at byte {FRONT_BYTES}; any HDF5 tool opens this file as it is.\n"
        f"bytes after this block: {size_bytes}\n"
        f"sha256 of them: {digest}\n"
    )
    return text.encode("latin-1").ljust(FRONT_BYTES - 1) + b"\n"


def parse_front(block: bytes, path: Path) -> tuple[str, int]:
    """Digest and size the first block promises; RecordDamaged with one line for everything else."""
    first_line = block.split(b"\n", 1)[0].decode("latin-1")
    if not first_line.startswith(FORMAT + " "):
        raise RecordDamaged(f"{path} is not a sealed midspan record ({_what(block)})", first_bad="front")
    number = first_line[len(FORMAT) + 1 :]
    if number.isdecimal() and int(number) > FORMAT_VERSION:
        raise RecordDamaged(
            f"{path} has format version {number}, this midspan reads up to {FORMAT_VERSION}: use a newer one",
            first_bad="format version",
        )
    lines = block.decode("latin-1").split("\n")
    try:
        size_bytes, digest = int(lines[2].rpartition(" ")[2]), lines[3].rpartition(" ")[2]
    except (IndexError, ValueError):
        raise RecordDamaged(f"{path}: the text at its beginning is damaged", first_bad="front") from None
    if front_block(digest, size_bytes) != block:
        raise RecordDamaged(f"{path}: the text at its beginning is damaged", first_bad="front")
    return digest, size_bytes


def _what(block: bytes) -> str:
    if not block.strip(b"\0 \n"):
        return "it is empty"
    if block.startswith(b"\x89HDF\r\n\x1a\n"):
        return "an HDF5 file of another kind, or a live file that was never sealed"
    return "not an HDF5 record"
