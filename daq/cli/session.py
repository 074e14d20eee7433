"""One bar after another through a station: what `run` and `demo` have in common. Blocks in the caller's thread."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from typing import Any

from daq.errors import MidspanError
from daq.station.client import Client
from daq.stream.updates import Update

OnUpdate = Callable[[Update | None], None]


class Session:
    """Follows the feed while it waits. on_update is called with each update, and with None when nothing came."""

    def __init__(self, client: Client, on_update: OnUpdate) -> None:
        self._client = client
        self._on_update = on_update
        self.state = ""
        self.moving = False
        self._closed: dict[str, Mapping[str, Any]] = {}
        self._results: dict[str, Mapping[str, Any]] = {}

    def pump(self, timeout_s: float = 0.05) -> None:
        """Take what has come."""
        came = False
        for update in self._client.updates(timeout_s):
            came = True
            self._note(update)
            self._on_update(update)
        if not came:
            self._on_update(None)

    def wait_for(self, what: str, test: Callable[[], bool], timeout_s: float) -> None:
        """Pump until the test holds. Raises MidspanError with what was waited for."""
        until_s = time.monotonic() + timeout_s
        while not test():
            if time.monotonic() > until_s:
                raise MidspanError(f"waited {timeout_s:.0f} s for {what}; the frame is: {self.state}")
            self.pump()

    def mount(self, specimen: str | None = None) -> dict[str, Any]:
        """Call the next bar (or a named one): tare, then ready."""
        words = {} if specimen is None else {"specimen": specimen}
        return self._client.do("mount", **words)

    def break_bar(self, specimen: str | None = None, *, timeout_s: float = 900.0) -> Mapping[str, Any]:
        """Mount, start, wait for the end and the sealed record; returns the archivist's report."""
        run_id = str(self.mount(specimen)["run_id"])
        self.wait_for("ready", lambda: self.state == "ready" or run_id in self._closed, 30.0)
        if run_id not in self._closed:
            self._client.do("start")
        return self.finish(run_id, timeout_s=timeout_s)

    def finish(self, run_id: str, *, timeout_s: float) -> Mapping[str, Any]:
        """Wait until a run's record is sealed."""
        self.wait_for("the end of the run", lambda: run_id in self._closed, timeout_s)
        self.wait_for("the sealed record", lambda: run_id in self._results, 60.0)
        return self._results[run_id]

    def _note(self, update: Update) -> None:
        if update.kind == "state":
            self.state = str(update.body["state"])
        elif update.kind == "summary":
            self.moving = any(update.body.get(key) for key in ("armed", "moving")) or bool(
                (update.body.get("inputs") or {}).get("moving")
            )
        elif update.kind == "event" and update.body["event"] == "run_closed":
            self._closed[str(update.body["run_id"])] = update.body
        elif update.kind == "result":
            self._results[str(update.body["run_id"])] = update.body
