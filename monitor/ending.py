"""The end of a loading in words: strength, class, residual load, standstill, verdict. Pure: updates in, lines out."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from monitor.presenter import Line, Tone
from monitor.wording import number

WAITS = "waits for the verdict"


@dataclass(slots=True)
class Ending:
    """Gathers what is told about the end of one run. verdict_first: the strength is not shown before the verdict."""

    verdict_first: bool = False
    run_id: str = ""
    specimen: str = ""
    fracture: Mapping[str, Any] | None = None
    residual: Mapping[str, Any] | None = None
    stopped: Mapping[str, Any] | None = None
    stop_failed: bool = False
    closed: Mapping[str, Any] | None = None
    result: Mapping[str, Any] | None = None
    record: str = ""
    verdict: str = ""
    cautions: list[str] = field(default_factory=list)

    def begin(self, run_id: str, specimen: str) -> None:
        """Another run: forget the last one."""
        self.run_id, self.specimen, self.record, self.verdict = run_id, specimen, "", ""
        self.fracture = self.residual = self.stopped = self.closed = self.result = None
        self.stop_failed = False
        self.cautions.clear()

    def take_event(self, event: Mapping[str, Any]) -> None:
        name = event.get("event")
        if name == "fracture":
            self.fracture, self.stopped = event, None
        elif name == "residual":
            self.residual = event
        elif name == "stopped" and self.stopped is None:
            self.stopped = event  # the first after the break; later ones belong to the way back
        elif name == "stop_failed":
            self.stop_failed = True
        elif name == "run_closed":
            self.closed = event

    def take_result(self, body: Mapping[str, Any]) -> None:
        """The sealed record of this run; another run's is not ours."""
        if body.get("run_id") == self.run_id or not self.run_id:
            self.result = dict(body.get("result") or {})
            self.record = str(body.get("path", ""))

    @property
    def is_broken(self) -> bool:
        return self.fracture is not None

    @property
    def is_over(self) -> bool:
        return self.fracture is not None or self.closed is not None

    @property
    def may_show_strength(self) -> bool:
        return bool(self.verdict) or not self.verdict_first

    def strength(self) -> str:
        """The number of the bar, or why there is none yet."""
        if self.result is None:
            return "being sealed" if self.closed is not None else "-"
        if self.result.get("strength_mpa") is None:
            return "no strength"
        return number(self.result["strength_mpa"], 1, "MPa") if self.may_show_strength else WAITS

    def lines(self) -> tuple[Line, ...]:
        """What stands beside the frozen trace."""
        if not self.is_over:
            return ()
        lines = [Line(f"{self.specimen} strength{self._expanded()}", self.strength())]
        if self._has_strength and self.result is not None:
            lines.append(Line("peak load", number(self.result.get("peak_n"), 1, "N")))
        lines.append(Line("class", self._class()))
        lines.append(self._residual())
        lines.append(self._standstill())
        lines.append(self._verdict())
        lines += [Line("remark", text, Tone.CAUTION) for text in self._remarks()]
        return tuple(lines)

    @property
    def _has_strength(self) -> bool:
        return (
            self.result is not None and self.result.get("strength_mpa") is not None and self.may_show_strength
        )

    def _expanded(self) -> str:
        expanded = (self.result or {}).get("strength_u_k2_mpa") if self._has_strength else None
        return "" if expanded is None else f", U (k = 2) {number(expanded, 1, 'MPa')}"

    def _class(self) -> str:
        told = self.fracture or self.closed or {}
        return str((self.result or {}).get("break_class") or told.get("verdict") or "-")

    def _residual(self) -> Line:
        if self.residual is None:
            return Line("on the bar", "not measured yet")
        left = number(self.residual.get("force_net_n"), 1, "N")
        if self.residual.get("unloaded"):
            return Line("on the bar", f"unloaded ({left})", Tone.GOOD)
        return Line("on the bar", f"{left} STILL ON", Tone.STOP)

    def _standstill(self) -> Line:
        if self.stop_failed:
            return Line("crosshead", "NOT STOPPING - EMERGENCY STOP", Tone.STOP)
        if self.stopped is None:
            return Line("crosshead", "stop not confirmed yet")
        if not self.stopped.get("verified", True):
            return Line("crosshead", "stopped; no sensor to confirm it", Tone.CAUTION)
        after = number(self.stopped.get("after_s"), 2, "s")
        return Line("crosshead", f"stands still, after {after}", Tone.GOOD)

    def _verdict(self) -> Line:
        """A person's, else what the method's rules say so far."""
        if self.verdict:
            tone = Tone.CAUTION if self.verdict in ("not counted", "interrupted") else Tone.GOOD
            return Line("verdict", self.verdict, tone)
        rules = str((self.result or {}).get("verdict") or "")
        return Line("verdict", f"rules: {rules}" if rules else "not given yet")

    def _remarks(self) -> list[str]:
        result = self.result or {}
        why = [str(result["verdict_reason"])] if result.get("verdict_reason") and not self.verdict else []
        told = [str(remark["text"]) for remark in result.get("remarks") or () if remark.get("text")]
        return [text for text in dict.fromkeys([*why, *told]) if text][:3]
