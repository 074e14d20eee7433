"""Account: what became of the rows of a link, and how an event is written down. Pure.

received = recorded + rejected (by reason)
"""

from __future__ import annotations

from dataclasses import dataclass, field

from daq.watch.values import Event, Json


@dataclass(slots=True)
class Account:
    """Rows of one link since the run was opened."""

    recorded: int = 0
    rejected: dict[str, int] = field(default_factory=dict)

    def reject(self, reason: str, rows: int) -> None:
        self.rejected[reason] = self.rejected.get(reason, 0) + rows

    def as_json(self) -> dict[str, Json]:
        received = self.recorded + sum(self.rejected.values())
        return {"received": received, "recorded": self.recorded, "rejected": dict(self.rejected)}


def flat(event: Event) -> dict[str, object]:
    """An event as the record and the feed carry it."""
    return {"event": event.name, "time_s": event.time_s, "severity": event.severity.value, **event.fields}
