"""Aside: work that may wait for a disk or a network share, done beside the station's event loop with a time limit.

A thread of its own for each, and a daemon: one that hangs in the kernel for ever holds up neither the loop nor the end
of the process. Their number is bounded.
"""

from __future__ import annotations

import asyncio
import threading
from collections.abc import Callable
from contextlib import suppress
from typing import TypeVar

from daq.errors import MidspanError, Refused

AT_ONCE_MAX = 8
EXPECTED = (MidspanError, OSError, ValueError, KeyError, TypeError)

Result = TypeVar("Result")


class Aside:
    """Runs blocking calls beside the loop."""

    def __init__(self) -> None:
        self._running = 0

    async def do(self, command: str, what: str, work: Callable[[], Result], timeout_s: float) -> Result:
        """The work's result, or what it raised. Refused where it comes too late; its thread is left to itself."""
        if self._running >= AT_ONCE_MAX:
            raise Refused(
                command, (f"{what} does not answer; {AT_ONCE_MAX} questions wait for a disk already",)
            )
        loop = asyncio.get_running_loop()
        future: asyncio.Future[Result] = loop.create_future()
        self._running += 1

        def hand_over(result: Result | None, error: Exception | None) -> None:
            self._running -= 1
            if future.done():
                return  # nobody waits any more
            if error is not None:
                future.set_exception(error)
            else:
                future.set_result(result)  # type: ignore[arg-type]

        def body() -> None:
            result: Result | None = None
            failure: Exception | None = None
            try:
                result = work()
            except (
                EXPECTED
            ) as error:  # anything else is a programming error: its traceback is told, nobody answers
                failure = error
            with suppress(RuntimeError):  # the loop has ended meanwhile
                loop.call_soon_threadsafe(hand_over, result, failure)

        threading.Thread(target=body, name=what, daemon=True).start()
        try:
            return await asyncio.wait_for(future, timeout_s)
        except TimeoutError as error:
            raise Refused(
                command, (f"{what} does not answer within {timeout_s:.0f} s; try again",)
            ) from error
        except OSError as error:
            raise Refused(command, (f"{what}: {error.strerror or error}",)) from error
