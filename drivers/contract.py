"""check_driver: what every driver promises, checked from outside: virtual, replayed, simulated on a wire,
or real.

    check_driver(make, world)

`make` builds a driver that is not yet open; it is called once for each check. `world` says what can be
observed or done on the other side; what it cannot do is skipped and named in the returned list.
ContractBroken names the promise.
Only STOP is ever sent.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import get_args

import numpy as np

from daq.cards.frame import Channel
from daq.errors import LinkClosed, LinkLost
from drivers.decoded import Decoded
from drivers.driver import Driver

UNITS = frozenset(get_args(Channel.model_fields["unit"].annotation))
GRACE_S = 0.25
"""A busy computer may answer this much late; a driver that waits for ever does not."""


class ContractBroken(AssertionError):
    """A driver does not do what every driver must."""


@dataclass(frozen=True, slots=True)
class World:
    """The other side of the driver. None: cannot be observed or done here.

    heard: all bytes the machine has received so far. stop_bytes: what one STOP looks like on the wire.
    opening_bytes: what may be sent at opening. hush: the machine falls silent. wake: undoes it. lose: the
    cable is pulled.
    """

    heard: Callable[[], bytes] | None = None
    stop_bytes: bytes | None = None
    opening_bytes: bytes = b""
    hush: Callable[[], None] | None = None
    wake: Callable[[], None] | None = None
    lose: Callable[[], None] | None = None
    rows: int = 50
    patience_s: float = 5.0


def check_driver(make: Callable[[], Driver], world: World) -> list[str]:
    """Check every promise the world allows to check. Returns the names of those it could not."""
    skipped = []
    _check_channels(make())
    _check_rows(make, world)
    _check_closed(make)
    for name, needed, check in (
        ("opening sends nothing that moves", world.heard, _check_opening),
        ("stop may be sent any number of times", world.heard and world.stop_bytes, _check_stop),
        ("a time-out is kept", world.hush, _check_timeout),
        ("a lost link is said, not waited for", world.lose, _check_lost),
    ):
        if needed is None:
            skipped.append(name)
        else:
            check(make, world)
    return skipped


def _must(promise: bool, text: str) -> None:
    if not promise:
        raise ContractBroken(text)


def _check_channels(driver: Driver) -> None:
    """Names and units are known before anything is opened."""
    names = [channel.name for channel in driver.channels]
    _must(bool(names), "a driver has at least one channel")
    _must(len(set(names)) == len(names), f"channel names differ from each other: {names}")
    for channel in driver.channels:
        _must(channel.unit in UNITS, f"channel {channel.name}: unit {channel.unit!r} is none of the card's")


def _check_rows(make: Callable[[], Driver], world: World) -> None:
    """Numbers and times rise, gaps are stated, counts are read-only columns of the declared channels."""
    with _opened(make) as driver:
        blocks = [block for part in _read_rows(driver, world) for block in part.blocks]
        next_index, last_s = 0, -np.inf
        for number, block in enumerate(blocks):
            _must(block.counts.shape == (block.count, len(driver.channels)), "one column a channel, in order")
            _must(block.counts.dtype == np.float64, "counts are float64")
            writeable = block.counts.flags.writeable or block.time_s.flags.writeable
            _must(not writeable, "blocks are read-only")
            _must(block.time_s[0] > last_s and bool(np.all(np.diff(block.time_s) > 0)), "times rise strictly")
            missing = block.first_index - next_index
            _must(number == 0 or missing >= 0, f"sample numbers rise: {next_index} then {block.first_index}")
            if number and block.gap_samples >= 0:
                _must(missing == block.gap_samples, f"a gap of {missing} is stated: {block.gap_samples}")
            next_index, last_s = block.first_index + block.count, float(block.time_s[-1])


def _check_opening(make: Callable[[], Driver], world: World) -> None:
    assert world.heard is not None
    before = world.heard()
    with _opened(make) as driver:
        _read_rows(driver, world)
        sent = world.heard()[len(before) :]
    # what an earlier opening sent may be heard only now
    more = sent.replace(world.opening_bytes, b"") if world.opening_bytes else sent
    _must(more == b"", f"opening and reading send nothing but the start command: {sent!r}")


def _check_stop(make: Callable[[], Driver], world: World) -> None:
    assert world.heard is not None and world.stop_bytes
    with _opened(make) as driver:
        _read_rows(driver, world)
        before = world.heard()
        driver.stop()
        driver.stop()
        expected = before + 2 * world.stop_bytes
        deadline_s = time.monotonic() + world.patience_s
        while len(world.heard()) < len(expected) and time.monotonic() < deadline_s:
            driver.read(0.01)
        sent = world.heard()[len(before) :]
        _must(sent == 2 * world.stop_bytes, f"two stops are the same bytes twice: {sent!r}")


def _check_timeout(make: Callable[[], Driver], world: World) -> None:
    assert world.hush is not None
    with _opened(make) as driver:
        _read_rows(driver, world)
        world.hush()
        deadline_s = time.monotonic() + world.patience_s
        while driver.read(0.05) is not None:
            _must(time.monotonic() < deadline_s, "a silent machine gives None")
        for timeout_s in (0.0, 0.05):
            began_s = time.monotonic()
            found = driver.read(timeout_s)
            took_s = time.monotonic() - began_s
            _must(found is None, "nothing there is None, not an empty answer")
            _must(took_s >= 0.9 * timeout_s, f"a time-out of {timeout_s} s is waited for: {took_s:.3f} s")
            _must(took_s <= timeout_s + GRACE_S, f"a time-out of {timeout_s} s is kept: {took_s:.3f} s")
    if world.wake is not None:
        world.wake()


def _check_lost(make: Callable[[], Driver], world: World) -> None:
    assert world.lose is not None
    with _opened(make) as driver:
        _read_rows(driver, world)
        world.lose()
        deadline_s = time.monotonic() + world.patience_s
        try:
            while time.monotonic() < deadline_s:
                driver.read(0.05)
        except LinkLost:
            lost = _raises(lambda: driver.read(0.0), LinkLost, LinkClosed)
            _must(lost, "a lost link stays lost: nothing pretends that the machine can be reached")
            return
        _must(False, f"a lost link is LinkLost within {world.patience_s} s")


def _check_closed(make: Callable[[], Driver]) -> None:
    driver = make()
    driver.open()
    driver.close()
    driver.close()
    _must(_raises(lambda: driver.read(0.0), LinkClosed), "reading after close is LinkClosed")
    _must(_raises(driver.stop, LinkClosed), "stopping after close is LinkClosed")


def _raises(action: Callable[[], object], *kinds: type[Exception]) -> bool:
    try:
        action()
    except kinds:
        return True
    return False


def _read_rows(driver: Driver, world: World) -> list[Decoded]:
    parts: list[Decoded] = []
    rows = 0
    deadline_s = time.monotonic() + world.patience_s
    while rows < world.rows:
        in_time = time.monotonic() < deadline_s
        _must(in_time, f"{world.rows} rows within {world.patience_s} s: only {rows} came")
        part = driver.read(0.05)
        if part is not None:
            parts.append(part)
            rows += part.rows
    return parts


@contextmanager
def _opened(make: Callable[[], Driver]) -> Iterator[Driver]:
    driver = make()
    driver.open()
    try:
        yield driver
    finally:
        driver.close()
