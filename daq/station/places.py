"""Where a frame's sockets, ring, journal and records live. Decides names; opens nothing but folders."""

from __future__ import annotations

import os
import stat
from dataclasses import dataclass
from pathlib import Path

from daq.errors import MidspanError

SOCKET_PATH_BYTES_MAX = 107  # sun_path of Linux less its closing zero
PID_MAX = 4_194_304  # Linux's PID_MAX_LIMIT on 64-bit machines


@dataclass(frozen=True, slots=True)
class Places:
    """All paths of one frame. runtime is private to the user and gone after a reboot; data stays."""

    frame: str
    runtime: Path
    data: Path

    @property
    def stop_socket(self) -> Path:
        return self.runtime / "stop"

    @property
    def bench_socket(self) -> Path:
        return self.runtime / "bench"

    @property
    def station_socket(self) -> Path:
        return self.runtime / "station"

    def requests_socket(self, pid: int) -> Path:
        """Where the bench's answers to one station reach it."""
        return self.runtime / f"station-{pid}"

    @property
    def control_address(self) -> str:
        return f"ipc://{self.runtime / 'control'}"

    @property
    def feed_address(self) -> str:
        return f"ipc://{self.runtime / 'feed'}"

    @property
    def lock(self) -> Path:
        return self.runtime / "lock"

    @property
    def spool(self) -> Path:
        """Journals and live files: everything that is not sealed yet."""
        return self.data / ".spool" / self.frame

    @property
    def running_mark(self) -> Path:
        """Stands while a daemon runs; found at a start it means that the last end was unclean."""
        return self.spool / "running"

    @property
    def frame_mark(self) -> Path:
        """Its twin for daemons with another data folder: beside nobody's data, known by the frame's name alone.

        It outlives a reboot, unless MIDSPAN_RUNTIME keeps everything of ours in one place.
        """
        if os.environ.get("MIDSPAN_RUNTIME"):
            return self.runtime.with_name(f"{self.frame}.running")
        state = os.environ.get("XDG_STATE_HOME") or Path.home() / ".local" / "state"
        return Path(state) / "midspan" / f"{self.frame}@{os.uname().nodename}.running"

    @property
    def proofs(self) -> Path:
        """Recorded polarity checks and stop drills of this frame."""
        return self.spool / "proofs.json"

    def ring(self, stream_id: int) -> Path:
        return self.runtime / f"ring-{stream_id:016x}"

    def journal(self, stream_id: int) -> Path:
        return self.spool / f"journal-{stream_id:016x}"

    def make(self) -> None:
        """Create the folders, the runtime one closed to everybody else."""
        private_folder(self.runtime.parent)
        private_folder(self.runtime)
        try:
            self.spool.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise MidspanError(
                f"data folder {self.data}: cannot be used ({error.strerror}): name another with --data"
            ) from error


def places_for(frame: str, data: Path) -> Places:
    """The places of a frame. The runtime folder must be on tmpfs (the ring lives there)."""
    base = os.environ.get("MIDSPAN_RUNTIME") or os.environ.get("XDG_RUNTIME_DIR")
    root = Path(base) / "midspan" if base else Path(f"/dev/shm/midspan-{os.getuid()}")
    places = Places(frame, root / frame, data.absolute())
    longest = max(len(os.fsencode(path)) for path in (places.station_socket, places.requests_socket(PID_MAX)))
    if longest > SOCKET_PATH_BYTES_MAX:
        raise MidspanError(
            f"runtime folder {places.runtime}: socket paths would be {longest} bytes, at most {SOCKET_PATH_BYTES_MAX}"
            " are allowed; set XDG_RUNTIME_DIR to a shorter folder"
        )
    return places


def data_of_journal(journal: Path) -> Path:
    """The data folder a journal's records go to: .spool/FRAME/journal-... lies in it."""
    return journal.parents[2]


def private_folder(folder: Path) -> None:
    """Make a folder of mode 0700; refuse one that belongs to somebody else or is a symbolic link."""
    try:
        folder.mkdir(mode=0o700, parents=True, exist_ok=True)
        facts = os.lstat(folder)
    except OSError as error:
        raise MidspanError(
            f"runtime folder {folder}: {error.strerror}; set XDG_RUNTIME_DIR to a folder of your own on tmpfs"
        ) from error
    if not stat.S_ISDIR(facts.st_mode) or facts.st_uid != os.getuid():
        raise MidspanError(
            f"runtime folder {folder} is not a folder of this user; remove it or set XDG_RUNTIME_DIR"
        )
    if facts.st_mode & 0o077:
        os.chmod(folder, 0o700)
