"""A disk in memory that forgets as real ones do, behind the same Files layer as the real one.

What was written and not synced may, after a power loss, be there, be missing, be torn, be zero, be flipped,
each write for itself; names that were made, changed or removed without a folder sync likewise. What was
synced stays.
"""

from __future__ import annotations

import errno
from collections.abc import Callable
from pathlib import Path
from random import Random

SECTOR_BYTES = 512
PENDING_MAX = 8


class Inode:
    """One file: what the disk holds, what the host sees, and the writes in between."""

    def __init__(self, durable: bytes = b"") -> None:
        self.durable = durable
        self.seen = bytearray(durable)
        self.pending: list[tuple[int, bytes]] = []

    def write(self, data: bytes, offset: int) -> None:
        _lay(self.seen, offset, data)
        self.pending.append((offset, bytes(data)))
        if len(self.pending) > PENDING_MAX:  # as hosts do: old writes go out in the background
            content = bytearray(self.durable)
            _lay(content, *self.pending.pop(0))
            self.durable = bytes(content)

    def sync(self) -> None:
        content = bytearray(self.durable)
        for offset, data in self.pending:
            _lay(content, offset, data)
        self.durable = bytes(content)
        self.pending.clear()

    def fail_to_sync(self) -> None:
        """As kernels do it: the host goes on showing what was written, no later sync will write it."""
        self.pending.clear()


class Disk:
    """Files in one folder. `after` is called after each change, which is where a power loss can strike."""

    def __init__(self, room_bytes: int = 1 << 40) -> None:
        self.names_seen: dict[str, Inode] = {}
        self.names_durable: dict[str, Inode] = {}
        self.unsynced_names: list[tuple[str, Inode | None]] = []
        self.handles: dict[int, Inode] = {}
        self.locked: set[str] = set()
        self.lock_handles: dict[int, str] = {}
        self.next_handle = 3
        self.room_bytes = room_bytes
        self.after: Callable[[], None] = lambda: None

    # --- the Files layer ----------------------------------------------------------------------------------
    def make_folder(self, folder: Path) -> None:
        """There is one folder and it is there."""

    def names(self, folder: Path) -> list[str]:
        return list(self.names_seen)

    def create(self, path: Path) -> int:
        if path.name in self.names_seen:
            raise FileExistsError(errno.EEXIST, "exists", path.name)
        self._name(path.name, Inode())
        return self.open(path, writable=True)

    def open(self, path: Path, *, writable: bool) -> int:
        if path.name not in self.names_seen:
            raise FileNotFoundError(errno.ENOENT, "absent", path.name)
        return self._handle(self.names_seen[path.name])

    def close(self, handle: int) -> None:
        if handle in self.lock_handles:
            self.locked.discard(self.lock_handles.pop(handle))
        else:
            del self.handles[handle]

    def size(self, handle: int) -> int:
        return len(self.handles[handle].seen)

    def fill(self, handle: int, size_bytes: int) -> None:
        used = sum(len(inode.seen) for inode in {id(i): i for i in self.names_seen.values()}.values())
        if used + size_bytes > self.room_bytes:
            raise OSError(errno.ENOSPC, "disk full")
        self.write(handle, bytes(size_bytes), 0)

    def read(self, handle: int, size_bytes: int, offset: int) -> bytes:
        return bytes(self.handles[handle].seen[offset : offset + size_bytes])

    def write(self, handle: int, data: bytes, offset: int) -> None:
        self.handles[handle].write(data, offset)
        self.after()

    def sync(self, handle: int) -> None:
        self.handles[handle].sync()
        self.after()

    def rename(self, old: Path, new: Path) -> None:
        inode = self.names_seen[old.name]
        self._name(new.name, inode)
        self._name(old.name, None)
        self.after()

    def remove(self, path: Path) -> None:
        if path.name not in self.names_seen:
            raise FileNotFoundError(errno.ENOENT, "absent", path.name)
        self._name(path.name, None)
        self.after()

    def sync_folder(self, folder: Path) -> None:
        self.names_durable = dict(self.names_seen)
        self.unsynced_names.clear()
        self.after()

    def lock(self, path: Path) -> int:
        if path.name in self.locked:
            raise BlockingIOError(errno.EWOULDBLOCK, "locked")
        self.locked.add(path.name)
        handle = self._handle(Inode())
        self.lock_handles[handle] = path.name
        return handle

    # --- power loss ---------------------------------------------------------------------------------------
    def after_power_loss(self, rng: Random) -> Disk:
        """One of the disks that may be found afterwards."""
        names = dict(self.names_durable)
        kept = self.unsynced_names
        if (
            kept and rng.random() < 0.5
        ):  # an ordered file system keeps a prefix, another one may keep any subset
            kept = kept[: rng.randint(0, len(kept))]
        else:
            kept = [change for change in kept if rng.random() < 0.5]
        for name, inode in kept:
            if inode is None:
                names.pop(name, None)
            else:
                names[name] = inode
        found: dict[int, Inode] = {}
        image = Disk(self.room_bytes)
        for name, inode in names.items():
            if id(inode) not in found:
                found[id(inode)] = Inode(_survivor(inode, rng) if inode.pending else inode.durable)
            image.names_seen[name] = found[id(inode)]
        image.names_durable = dict(image.names_seen)
        return image

    @property
    def undecided(self) -> bool:
        """True while there is anything in a segment that a power loss might take."""
        return bool(self.unsynced_names) or any(
            inode.pending for name, inode in self.names_seen.items() if name.startswith("segment")
        )

    def after_kill(self) -> Disk:
        """The process is gone, the host is not: everything written is there, locks are free."""
        self.handles.clear()
        self.lock_handles.clear()
        self.locked.clear()
        self.after = lambda: None
        return self

    def _name(self, name: str, inode: Inode | None) -> None:
        if inode is None:
            del self.names_seen[name]
        else:
            self.names_seen[name] = inode
        self.unsynced_names.append((name, inode))

    def _handle(self, inode: Inode) -> int:
        self.next_handle += 1
        self.handles[self.next_handle] = inode
        return self.next_handle


def _survivor(inode: Inode, rng: Random) -> bytes:
    content = bytearray(inode.durable)
    writes = inode.pending if rng.random() < 0.5 else rng.sample(inode.pending, len(inode.pending))
    for offset, data in writes:
        for start, piece in _remains(data, rng):
            _lay(content, offset + start, piece)
    return bytes(content)


def _lay(content: bytearray, offset: int, data: bytes) -> None:
    content.extend(bytes(max(0, offset - len(content))))
    content[offset : offset + len(data)] = data


def _remains(data: bytes, rng: Random) -> list[tuple[int, bytes]]:
    """What is left of one write."""
    fate = rng.random()
    if fate < 0.45:
        return [(0, data)]
    if fate < 0.65:
        return []
    if fate < 0.75:  # torn at any byte
        return [(0, data[: rng.randrange(len(data) + 1)])]
    if fate < 0.85:  # each sector for itself
        starts = range(0, len(data), SECTOR_BYTES)
        return [(at, data[at : at + SECTOR_BYTES]) for at in starts if rng.random() < 0.5]
    if fate < 0.92:  # extended, never filled
        cut = rng.randrange(len(data) + 1)
        return [(0, data[:cut] + bytes(len(data) - cut))]
    flipped = bytearray(data)
    flipped[rng.randrange(len(data))] ^= 1 << rng.randrange(8)
    return [(0, bytes(flipped))]


class Faults:
    """Any Files layer with errors at chosen calls. Counts the calls that could fail.

    `fails(number, method)` decides. A failing write leaves half of its bytes, a failing sync loses them all.
    """

    METHODS = (
        "create",
        "open",
        "fill",
        "read",
        "write",
        "sync",
        "rename",
        "remove",
        "sync_folder",
        "names",
        "lock",
    )

    def __init__(self, files: object, fails: Callable[[int, str], bool], error: int = errno.EIO) -> None:
        self.files = files
        self.fails = fails
        self.error = error
        self.calls = 0
        self.failed: list[str] = []

    def __getattr__(self, method: str) -> object:
        call = getattr(self.files, method)
        if method not in self.METHODS:
            return call

        def perhaps(*arguments: object, **options: object) -> object:
            self.calls += 1
            if self.fails(self.calls, method):
                self.failed.append(method)
                if method == "write":
                    handle, data, offset = arguments
                    call(handle, data[: len(data) // 2], offset)
                if method == "sync" and isinstance(self.files, Disk):
                    self.files.handles[arguments[0]].fail_to_sync()
                raise OSError(self.error, "injected")
            return call(*arguments, **options)

        return perhaps
