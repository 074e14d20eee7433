"""The operator's seat: one named person may move the frame; any number may watch. Pure. A stop needs no seat."""

from __future__ import annotations

import hmac
from dataclasses import dataclass

from daq.errors import Refused

NAME_LENGTH_MAX = 80
TOKEN_LENGTH_MIN = 16


@dataclass(slots=True)
class Seat:
    """Who sits in it. Tokens are made by the shell (they need a random source)."""

    operator: str = ""
    _token: str = ""

    @property
    def taken(self) -> bool:
        return bool(self._token)

    def sit(self, operator: str, token: str, *, instead: bool = False) -> None:
        """Take the seat; `instead` takes it over from somebody whose terminal has died, by name."""
        assert len(token) >= TOKEN_LENGTH_MIN
        name = operator.strip()
        if not name or len(name) > NAME_LENGTH_MAX or not name.isprintable():
            raise Refused("sit", (f"operator's name must be 1 to {NAME_LENGTH_MAX} printable characters",))
        if self.taken and not instead:
            raise Refused(
                "sit", (f"the seat is taken by {self.operator}; ask them to rise, or sit with --instead",)
            )
        self.operator, self._token = name, token

    def rise(self, token: str) -> None:
        self.check("rise", token)
        self.operator = self._token = ""

    def check(self, command: str, token: str) -> None:
        """Raises Refused unless the caller sits in the seat."""
        if not self.taken:
            raise Refused(command, ("nobody sits at this frame; take the seat first",))
        if not hmac.compare_digest(token.encode(), self._token.encode()):
            raise Refused(command, (f"the seat is {self.operator}'s; watching is open to everybody",))
