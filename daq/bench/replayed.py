"""Replayed: the bench core as recomputation plays it: with the memory of another, and without a clock of its own. Pure.

It decides nothing that BenchCore does not decide. What it adds: going on from a memory, blocks that were decoded
before, many plain reads at once, and sends at recorded moments instead of due ones.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from daq.bench.core import REMEMBERED, BenchCore, Write
from daq.bench.memory import NotKept, restore
from daq.stream.block import Block, after_loss
from drivers.decoded import Decoder


class ReplayedBench(BenchCore):
    """For daq.recompute only."""

    def recall(self, memory: Mapping[str, Any]) -> None:
        """Go on with the memory of another one that was made from the same cards. NotKept where that cannot be."""
        if sorted(memory) != sorted(REMEMBERED):
            raise NotKept("a bench of another version wrote it")
        self._opened = set(range(len(self._frame.links)))  # or no run could have been opened
        for name, kept in memory.items():
            setattr(self, name, restore(getattr(self, name), kept))

    @property
    def after_loss(self) -> frozenset[int]:
        """Links that are open again and have given no block since."""
        return frozenset(self._after_loss)

    def play(self, players: Sequence[Decoder]) -> list[Decoder]:
        """Put others in the place of the decoders, which are handed out as they stand. Nothing is held back then."""
        before, self._decoders = self._decoders, list(players)
        self._peek_with(self._decoders[0])
        return before

    def received_plain(
        self, link: int, block: Block, rows: Sequence[int], moments_ns: Sequence[int]
    ) -> list[Write]:
        """Reads of nothing but rows that count on, as one: leaves what `received` leaves read by read, if all but the
        last of them decide nothing and none is later than `plain_lag_s` behind its last sample. Only for a frame with
        one link; keeps no RAW or BLOCK."""
        assert len(self._decoders) == 1
        moments_s = [self.seconds(moment_ns) for moment_ns in moments_ns]
        if link in self._after_loss:
            self._after_loss.discard(link)
            block = after_loss(block)
        self._heard_s = moments_s[-1] if rows[-1] else self._heard_s
        self._account[link].recorded += block.count
        self._obey(self.pipeline.advance(block, moments_s[-1]), moments_ns[-1])
        self._tell_faults(link, self._health[link].judge_many(rows, moments_s), moments_ns[-1])
        return self._take_writes()

    def time_passed(self, now_ns: int) -> list[Write]:
        """A tick that sends nothing by the clock."""
        now_s = self.seconds(now_ns)
        self._obey(self.pipeline.advance(None, now_s), now_ns)
        if self._motion is not None:
            for fact in self._motion.expire(now_s):
                self._heed(fact, now_ns)
        return self._take_writes()

    def asked(self, now_ns: int) -> list[Write]:
        """The status word was asked for."""
        self._asked_s = float("-inf")
        self._ask(self.seconds(now_ns), now_ns)
        return self._take_writes()

    def kept_alive(self, now_ns: int) -> list[Write]:
        """The keep-alive was sent."""
        assert self._motion is not None
        self._kept_s = self.seconds(now_ns)
        self._send(self._motion.keep_alive(self._kept_s), now_ns)
        return self._take_writes()
