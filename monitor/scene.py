"""What the window knows, without a window: presenter, run, bar, ending, series. Pure: looks and updates in."""

from __future__ import annotations

from collections.abc import Container, Mapping
from typing import Any

from daq.errors import MidspanError
from daq.stream.updates import Update
from monitor.beam import Beam, beam_from_cards
from monitor.ending import Ending
from monitor.posture import Posture
from monitor.presenter import Presenter


class Scene:
    """Feed it; ask it. verdict_first: no strength before the verdict."""

    def __init__(self, *, verdict_first: bool = False) -> None:
        self.presenter = Presenter()
        self.ending = Ending(verdict_first=verdict_first)
        self.frame: Mapping[str, Any] = {}
        self.sitting: Mapping[str, Any] | None = None
        self.run_id = ""
        self.beam: Beam | None = None
        self.beam_note = "no bar has been called"
        self.fixture = ""
        self.method: Mapping[str, Any] = {}
        self.breaks_mm: tuple[float, ...] = ()
        self._specimen: Mapping[str, Any] | None = None
        self.wants_look = False  # something has come that only a look can tell
        self._unjudged: frozenset[str] = frozenset()
        self._number = -1

    @property
    def heard(self) -> int:
        """Number of the newest update; a station that was started again counts from one."""
        return self._number

    # --- in
    def take_look(self, look: Mapping[str, Any], now_s: float) -> None:
        """A late joiner's start, and what a station that was started again knows."""
        self.presenter.take_look(look, now_s, newer_heard=int(look.get("update", -1)) < self._number)
        self.frame = look["frame"]
        self.sitting = look.get("sitting")
        self.wants_look = False
        opened = look.get("opened")
        if opened:
            self._open(opened)
            for event in look.get("events") or ():
                self.ending.take_event(event)
        self._take_results()
        self._fit()

    def take(self, update: Update, now_s: float) -> bool:
        """One update; True when it opened another run."""
        if update.number <= self._number:
            self.wants_look = True  # the station was started again
        self._number = update.number
        self.presenter.take(update, now_s)
        if update.kind == "event":
            return self._take_event(update.body)
        if update.kind == "result":
            self.ending.take_result(update.body)
            self.wants_look = True
        elif update.kind == "state":
            self._take_state(update.body)
        return False

    def _take_event(self, event: Mapping[str, Any]) -> bool:
        if event.get("event") == "run_opened":
            self._open(event)
            self._fit()
            return True
        self.ending.take_event(event)
        return False

    def _take_state(self, body: Mapping[str, Any]) -> None:
        if str(body.get("series") or "") != str((self.sitting or {}).get("series") or ""):
            self.wants_look = True

    def _open(self, opened: Mapping[str, Any]) -> None:
        run = opened["run"]
        if str(run["run_id"]) != self.run_id:
            self.breaks_mm = ()
            self._unjudged = self.unjudged()
            self.ending.begin(str(run["run_id"]), str(run["specimen"]))
        self.run_id = str(run["run_id"])
        self.method, self.fixture = opened["method"], str(opened["fixture"])
        self.frame = opened.get("frame") or self.frame
        self._specimen = opened["specimen_card"]

    def _take_results(self) -> None:
        """The result of the run that is on the screen, where its record has been sealed meanwhile."""
        for bar in (self.sitting or {}).get("bars", ()):
            if bar["number"] == self.ending.specimen and bar.get("result") and self.ending.closed is not None:
                self.ending.result, self.ending.record = dict(bar["result"]), str(bar.get("record", ""))

    def _fit(self) -> None:
        """The bar of the run, or before the first run the next one of the sheet."""
        sitting = self.sitting or {}
        method, fixture, specimen = self.method, self.fixture, self._specimen
        if not self.run_id and sitting:
            method, fixture = sitting.get("method_card") or {}, str(sitting.get("fixture", ""))
            bars = {bar["number"]: bar.get("specimen") for bar in sitting.get("bars", ())}
            specimen = bars.get(sitting.get("next"))
        if not method or not self.frame:
            self.beam, self.beam_note = None, "no bar has been called"
            return
        self.method, self.fixture = method, fixture
        try:
            self.beam, self.beam_note = beam_from_cards(self.frame, method, specimen, fixture), ""
        except (MidspanError, ValueError, KeyError) as error:
            self.beam, self.beam_note = None, f"the cards do not say how to draw it: {type(error).__name__}"

    # --- out
    def posture(self, *, stress_first: bool, may_mark: bool) -> Posture:
        """How the bar stands now."""
        summary, beam = self.presenter.summary, self.beam
        sag_mm = None
        if beam is not None and summary.get("deflection_mm") is not None:
            sag_mm = float(summary["deflection_mm"]) * beam.mid_per_measured
        percent = summary.get("expected_percent")
        broken = self.ending.is_broken
        return Posture(
            sag_mm=sag_mm,
            share=0.0 if percent is None else max(0.0, float(percent) / 100.0),
            broken=broken,
            breaks_mm=self.breaks_mm,
            may_mark=broken and may_mark,
            stress_first=stress_first,
        )

    def strengths_mpa(self, not_counted: Container[str] = ()) -> tuple[float, ...]:
        """Of the broken bars in their order; without those not counted, and one that waits for its verdict."""
        found = []
        for bar in (self.sitting or {}).get("bars", ()):
            strength = (bar.get("result") or {}).get("strength_mpa")
            if bar["number"] in self.unjudged():
                continue
            if bar["state"] == "broken" and strength is not None and bar["number"] not in not_counted:
                found.append(float(strength))
        return tuple(found)

    def unjudged(self) -> frozenset[str]:
        """With verdict first: bars that ended here and have no verdict yet; their strength is not shown."""
        waits = self.ending.is_over and not self.ending.may_show_strength and self.ending.specimen
        return self._unjudged | {self.ending.specimen} if waits else self._unjudged

    def judged(self, number: str) -> None:
        """A verdict has been given."""
        self._unjudged -= {number}
