"""Continuity: gaps, overlaps and duplicates are named; every row is accounted for."""

from random import Random

import pytest

from daq.stream.block import GAP_UNKNOWN
from daq.stream.continuity import REPEATED, Continuation, Continuity, Join


def test_blocks_that_follow_each_other_are_contiguous() -> None:
    continuity = Continuity()
    assert continuity.judge(1000, 5) == Continuation(Join.FIRST)
    assert continuity.judge(1005, 1) == Continuation(Join.CONTIGUOUS)
    assert continuity.account().missing == 0


@pytest.mark.parametrize(
    ("first", "count", "gap", "expected"),
    [
        (13, 4, 3, Continuation(Join.GAP, missing=3)),
        (13, 4, 0, Continuation(Join.GAP, missing=3)),
        (10, 4, 7, Continuation(Join.GAP, missing=7)),
        (10, 4, GAP_UNKNOWN, Continuation(Join.GAP, missing=GAP_UNKNOWN)),
        (12, 4, GAP_UNKNOWN, Continuation(Join.GAP, missing=2)),
        (8, 4, 0, Continuation(Join.OVERLAP, repeated=2)),
        (8, 2, 0, Continuation(Join.DUPLICATE, repeated=2)),
        (0, 3, 0, Continuation(Join.DUPLICATE, repeated=3)),
    ],
)
def test_what_does_not_follow_is_named(first: int, count: int, gap: int, expected: Continuation) -> None:
    continuity = Continuity()
    continuity.judge(0, 10)
    assert continuity.judge(first, count, gap) == expected
    account = continuity.account()
    assert account.residual == 0
    assert account.missing == max(expected.missing, 0)
    assert account.gaps_of_unknown_length == (expected.missing == GAP_UNKNOWN)


def test_a_first_block_may_say_that_something_is_missing_before_it() -> None:
    continuity = Continuity()
    assert continuity.judge(7, 2, GAP_UNKNOWN) == Continuation(Join.GAP, missing=GAP_UNKNOWN)


@pytest.mark.parametrize("seed", range(5))
def test_the_account_balances_whatever_comes(seed: int) -> None:
    """Against a set of sample numbers."""
    rng = Random(seed)
    continuity = Continuity()
    seen: set[int] = set()
    received, unreadable, newest = 0, 0, 99
    for _ in range(500):
        first = max(100, newest + 1 + rng.choice((0, 0, 0, 0, 3, 40, -2, -30)))
        count = rng.randint(1, 20)
        continuity.judge(first, count)
        seen |= set(range(max(first, newest + 1), first + count))
        newest = max(newest, first + count - 1)
        received += count
        if rng.random() < 0.1:
            continuity.reject("checksum", 2)
            received, unreadable = received + 2, unreadable + 2
    account = continuity.account()
    assert account.received == received
    assert account.kept == len(seen)
    assert account.missing == newest - min(seen) + 1 - len(seen)
    assert account.rejected["checksum"] == unreadable
    assert account.rejected[REPEATED] == received - unreadable - len(seen)
    assert account.residual == 0
