"""Publish: bring a finished file under its name without ever overwriting one, and keep the list of digests.

Every step is durable before the next begins, so a kill between any two leaves either no file of that name
or the whole one. Each series folder holds SHA256SUMS, one line a record in the order of sealing, readable
by `sha256sum -c`.
"""

from __future__ import annotations

import errno
import hashlib
import os
import shutil
from pathlib import Path

from daq.errors import RecordingError
from daq.record.mark import sync_folder

SUMS_NAME = "SHA256SUMS"
_READ_BYTES = 1 << 20
_NO_LINKS = (errno.EPERM, errno.ENOTSUP, errno.EOPNOTSUPP, errno.ENOSYS, errno.EMLINK)


def sha256_of(path: Path, *, skip_bytes: int = 0) -> str:
    digest = hashlib.sha256()
    with open(path, "rb") as file:
        file.seek(skip_bytes)
        while piece := file.read(_READ_BYTES):
            digest.update(piece)
    return digest.hexdigest()


def sync_file(path: Path) -> None:
    descriptor = os.open(path, os.O_RDWR)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def make_folder(folder: Path) -> None:
    """Create the folder and make every new name on the way to it durable."""
    missing = [place for place in (folder, *folder.parents) if not place.exists()]
    for place in reversed(missing):
        place.mkdir(exist_ok=True)
        sync_folder(place.parent)


def publish_new(temp: Path, final: Path) -> None:
    """Give a synced file its name. FileExistsError if the name is taken; the other file stays as it is."""
    try:
        os.link(temp, final)
    except OSError as error:
        if error.errno not in _NO_LINKS:
            raise
        _claim(final)  # a file system without hard links
        os.replace(temp, final)
    else:
        os.unlink(temp)
    sync_folder(final.parent)


def _claim(final: Path) -> None:
    """Take a free name with an empty file; an empty one left by a kill right here may be taken again."""
    try:
        os.close(os.open(final, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o644))
    except FileExistsError:
        if final.stat().st_size:
            raise


def copy_verified(source: Path, target: Path, digest: str) -> None:
    """A durable copy whose bytes were read back. A target of the same digest counts as copied already."""
    if target.exists():
        if sha256_of(target) == digest:
            return
        raise RecordingError(
            f"{target} exists and differs from {source}: look at both, nothing was overwritten"
        )
    make_folder(target.parent)
    temp = target.with_name(f".{target.name}.part")
    temp.unlink(missing_ok=True)
    shutil.copyfile(source, temp)
    sync_file(temp)
    found = sha256_of(temp)
    if found != digest:
        temp.unlink()
        raise RecordingError(f"the copy {target} reads back with another digest than {source}")
    publish_new(temp, target)


def read_sums(folder: Path) -> list[tuple[str, str]]:
    """(digest, name) of every record of that folder in the order of sealing; a torn line is left out."""
    try:
        lines = (folder / SUMS_NAME).read_text(encoding="utf-8", errors="replace").splitlines()
    except FileNotFoundError:
        return []
    pairs = [line.split("  ", 1) for line in lines]
    return [(pair[0], pair[1]) for pair in pairs if len(pair) == 2 and len(pair[0]) == 64]


def add_sum(folder: Path, digest: str, name: str) -> None:
    """Append one line unless it stands there; a torn last line of a kill is ended first."""
    if (digest, name) in read_sums(folder):
        return
    with open(folder / SUMS_NAME, "ab+") as file:
        if file.tell():
            file.seek(-1, os.SEEK_END)
            if file.read(1) != b"\n":
                file.write(b"\n")
        file.write(f"{digest}  {name}\n".encode())
        file.flush()
        os.fsync(file.fileno())
    sync_folder(folder)
