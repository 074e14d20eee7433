"""The errors midspan raises at its borders. A leaf: imports nothing, may be imported by everyone.

MidspanError
 +- CardError(ValueError)   a bad card or table: names file, key, value, allowed range and what to do
 +- DriverError             fields: driver, device
 |   +- DriverOpenError     absent, busy, wrong model
 |   +- LinkLost            the world broke it (cable out, peer closed)
 |   +- LinkClosed          we used it after close
 |   +- ProtocolViolation   resynchronisation budget spent; field discarded_bytes
 +- RecordingError          unwritable, full, or writer behind; field last_sequence
 +- RecordDamaged           a journal or record that does not verify; names the first bad block
 +- FeedError               never leaves the station
 +- Refused                 a command that cannot be done now; field missing lists why
"""

from __future__ import annotations


class MidspanError(Exception):
    """Base of every error midspan raises on purpose; its text is one clear line."""


class CardError(MidspanError, ValueError):
    """A bad card. `problems` holds one line per fault, each complete in itself."""

    def __init__(self, problems: tuple[str, ...]) -> None:
        super().__init__("\n".join(problems))
        self.problems = problems


class DriverError(MidspanError):
    """A fault of a link or its decoder."""

    def __init__(self, message: str, *, driver: str, device: str) -> None:
        super().__init__(f"{driver} on {device}: {message}")
        self.driver = driver
        self.device = device


class DriverOpenError(DriverError):
    """The port is absent, busy, or not what the card says."""


class LinkLost(DriverError):
    """The world broke the link."""


class LinkClosed(DriverError):
    """The link was used after it had been closed."""


class ProtocolViolation(DriverError):
    """More garbage than the resynchronisation budget allows."""

    def __init__(self, message: str, *, driver: str, device: str, discarded_bytes: int) -> None:
        super().__init__(message, driver=driver, device=device)
        self.discarded_bytes = discarded_bytes


class RecordingError(MidspanError):
    """The recording path cannot keep what it was given."""

    def __init__(self, message: str, *, last_sequence: int | None = None) -> None:
        super().__init__(message)
        self.last_sequence = last_sequence


class RecordDamaged(MidspanError):
    """A journal or a record does not verify."""

    def __init__(self, message: str, *, first_bad: str) -> None:
        super().__init__(f"{message}; first bad: {first_bad}")
        self.first_bad = first_bad


class FeedError(MidspanError):
    """The feed cannot publish; never leaves the station."""


class Refused(MidspanError):
    """A command that cannot be done now."""

    def __init__(self, command: str, missing: tuple[str, ...]) -> None:
        super().__init__(f"{command} refused: " + "; ".join(missing))
        self.command = command
        self.missing = missing
