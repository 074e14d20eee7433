"""Many: the same function over an archive, on this computer's processors or on a Dask cluster that is there already.

Records are handed out a few at a time and come back in the order in which they were named, so an archive of any size
keeps neither memory nor order busy. A worker that dies ends the work with one line; records are only ever read.
"""

from __future__ import annotations

import importlib
import multiprocessing
import os
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Future, ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from pathlib import Path
from typing import Any, TypeAlias

from daq.errors import MidspanError
from daq.recompute.one import Recomputed, recompute

AHEAD_PER_JOB = 4
CLUSTER_AHEAD = 256
CLUSTER_WAIT_S = 10.0

Submit: TypeAlias = Callable[[Path], Any]


def records_in(paths: Sequence[Path]) -> tuple[Path, ...]:
    """Files as named; of a folder every sealed record in it and below, in order. Hidden folders hold what is not
    sealed yet and are left out."""
    found: list[Path] = []
    for path in paths:
        if not path.exists():
            raise MidspanError(f"{path} is not there")
        found += _below(path) if path.is_dir() else (path,)
    return tuple(dict.fromkeys(found))


def _below(folder: Path) -> list[Path]:
    found = []
    for place, folders, names in os.walk(folder):
        folders[:] = sorted(name for name in folders if not name.startswith("."))
        found += [Path(place) / name for name in names if name.endswith(".h5") and not name.startswith(".")]
    return sorted(found)


def recompute_all(
    paths: Sequence[Path], *, jobs: int, relative: float = 0.0, watch: bool = True
) -> Iterator[Recomputed]:
    """Each record's numbers, in the order of `paths`. jobs = 1: in this process."""
    if jobs == 1 or len(paths) < 2:
        for path in paths:
            yield recompute(path, relative, watch)
        return
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # the records are what runs in parallel
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(min(jobs, len(paths)), mp_context=context) as pool:
        try:
            yield from _in_order(
                lambda path: pool.submit(recompute, path, relative, watch), paths, jobs * AHEAD_PER_JOB
            )
        except BrokenProcessPool:
            raise MidspanError(
                "a worker process died while reading a record: `midspan verify` on the rest names the bad file"
            ) from None


def recompute_on_cluster(
    paths: Sequence[Path], address: str, *, relative: float = 0.0, watch: bool = True
) -> Iterator[Recomputed]:
    """The same on the workers of a Dask cluster; they must see the files under the same paths and have midspan."""
    try:
        distributed: Any = importlib.import_module("distributed")  # an extra: most installations do without
    except ImportError:
        raise MidspanError("--cluster needs the extra: pip install 'midspan[cluster]'") from None
    try:
        client = distributed.Client(address, timeout=CLUSTER_WAIT_S, set_as_default=False)
    except (OSError, ValueError) as error:
        raise MidspanError(f"no cluster answers at {address}: {error or 'timed out'}") from None
    with client:
        whole = [path.absolute() for path in paths]
        yield from _in_order(
            lambda path: client.submit(recompute, path, relative, watch, pure=False), whole, CLUSTER_AHEAD
        )


def _in_order(submit: Submit, paths: Sequence[Path], ahead: int) -> Iterator[Recomputed]:
    """At most `ahead` records under way; the oldest is waited for."""
    waiting: deque[Future[Recomputed]] = deque()
    for path in paths:
        waiting.append(submit(path))
        if len(waiting) > ahead:
            yield waiting.popleft().result()
    while waiting:
        yield waiting.popleft().result()
