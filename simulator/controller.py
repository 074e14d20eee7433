"""The machine's own controller: commands to orders, watchdog, switches, answers. Knows no bar and no force.

What is hard-wired acts whatever the software says: an open shield or a pressed emergency stop ends every motion,
that of a deaf controller too.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from daq.cards.frame import FrameCard, InputName
from simulator.card import SimulatorCard
from simulator.commands import Heard, Verb, signed_distance_mm, status_letters
from simulator.crosshead import NEVER, Crosshead, Halt, Run
from simulator.faults import MachineFault, SpeedSlip

SWITCHES: tuple[InputName, ...] = ("shield_open", "emergency_stop", "drive_fault")
INPUTS: tuple[InputName, ...] = (*SWITCHES, "end_up", "end_down", "moving")
SWITCH_FAULTS: dict[str, InputName] = {
    "shield-open": "shield_open",
    "emergency-stop": "emergency_stop",
    "drive-fault": "drive_fault",
}
REFUSED = "NO"  # to what cannot be obeyed now; no card lists it, so midspan sees a fault
NOT_UNDERSTOOD = "??"
TRAVEL_MM = 50.0  # where neither card says (a frame without motion)


@dataclass(frozen=True, slots=True)
class Answer:
    """reply: None where the machine says nothing. loads: the crosshead was told to move towards the bar."""

    reply: str | None
    loads: bool = False


class Controller:
    """One controller and its crosshead. Time is an argument; `next_s` names the next moment to call `act`."""

    def __init__(self, frame: FrameCard, card: SimulatorCard) -> None:
        self._frame, self._card = frame, card
        self.crosshead = _crosshead(frame, card)
        self.force_rate_n_s: float | None = None  # wanted of the machine's own force loop
        self._slip = (1.0, -math.inf)  # factor of a speed slip, until when
        self._switches: dict[InputName, bool] = dict.fromkeys(SWITCHES, False)
        self._faults: dict[str, float] = {}  # what is wrong, until when
        self._ends: list[tuple[float, InputName]] = []  # switches that go back by themselves
        self._kept_s = NEVER  # last sign of life; NEVER: watchdog not armed

    # --- time ---------------------------------------------------------------------------------------
    def next_s(self) -> float:
        """The next moment at which something changes by itself."""
        return min((moment_s for moment_s, _ in self._coming()))

    def act(self, now_s: float) -> bool:
        """Do what is due; True when the watchdog has stopped the motion."""
        lapsed = self._lapse_s() <= now_s
        for moment_s, do in self._coming():
            if moment_s <= now_s:
                do(now_s)
        return lapsed

    def _coming(self) -> list[tuple[float, Callable[[float], None]]]:
        ends_s = min((end_s for end_s, _ in self._ends), default=NEVER)
        return [
            (self._lapse_s(), self._lapse),
            (ends_s, self._switch_back),
            (self.crosshead.next_change_s(), self.crosshead.change),
        ]

    def _lapse_s(self) -> float:
        keep = self._frame.motion.keep_alive if self._frame.motion is not None else None
        if keep is None or not self._card.drive.watchdog or not self.crosshead.moving:
            return NEVER
        return self._kept_s + keep.lapse_s

    def _lapse(self, now_s: float) -> None:
        self._kept_s = NEVER
        if not self.faulty("stop-ignored", now_s):
            self.halt(now_s)

    # --- what it is ---------------------------------------------------------------------------------
    @property
    def switched_off(self) -> bool:
        """Shield, emergency stop or drive fault forbids motion."""
        return any(self._switches.values())

    def inputs(self, now_s: float) -> dict[InputName, bool]:
        """What the status word says."""
        up, down = self.crosshead.at_end(now_s)
        return {**self._switches, "end_up": up, "end_down": down, "moving": self.crosshead.moving}

    def faulty(self, kind: str, now_s: float) -> bool:
        return self._faults.get(kind, -math.inf) > now_s

    # --- what it is told ----------------------------------------------------------------------------
    def obey(self, heard: Heard, now_s: float) -> Answer:
        """Obey one command."""
        answer = self._obey(heard, now_s)
        silent = self.faulty("mute", now_s) or (heard.verb is Verb.STOP and self.faulty("deaf", now_s))
        return Answer(None if silent else answer.reply or None, answer.loads)

    def halt(self, now_s: float, *, at_once: bool = False) -> None:
        """The controller's own stop: no latency."""
        self.force_rate_n_s = None
        self.crosshead.order(now_s, Halt(at_once))

    def raise_by_hand(self, now_s: float) -> None:
        """To the start position, from the machine's own panel: not watched by the keep-alive."""
        self.force_rate_n_s = None
        self.crosshead.order(now_s, Run(-self._card.drive.hand_mm_min / 60, 0.0))
        self._kept_s = NEVER

    def switch(self, name: InputName, on: bool, now_s: float) -> None:
        """Shield, emergency stop or drive fault; hard-wired."""
        self._switches[name] = on
        if on:
            self.halt(now_s, at_once=name != "shield_open")

    def strike(self, fault: MachineFault | SpeedSlip, now_s: float) -> None:
        """A misfortune of the controller begins. A speed slip shows from the next motion on."""
        until_s = math.inf if fault.for_s is None else now_s + fault.for_s
        if isinstance(fault, SpeedSlip):
            self._slip = (fault.factor, until_s)
            return
        if fault.kind not in SWITCH_FAULTS:
            self._faults[fault.kind] = until_s
            return
        name = SWITCH_FAULTS[fault.kind]
        self.switch(name, True, now_s)
        if until_s < math.inf:
            self._ends.append((until_s, name))

    def clear(self) -> None:
        """All misfortunes end; switches go back."""
        self._faults.clear()
        self._ends.clear()
        self._switches = dict.fromkeys(SWITCHES, False)
        self._slip = (1.0, -math.inf)

    # --- inside -------------------------------------------------------------------------------------
    def _switch_back(self, now_s: float) -> None:
        for _, name in [end for end in self._ends if end[0] <= now_s]:
            self.switch(name, False, now_s)
        self._ends = [end for end in self._ends if end[0] > now_s]

    def _obey(self, heard: Heard, now_s: float) -> Answer:
        if heard.verb is Verb.STATUS:
            return Answer(heard.reply + status_letters(self._frame, self.inputs(now_s)))
        if heard.verb is Verb.KEEP_ALIVE:
            self._kept_s = now_s if self._kept_s != NEVER else NEVER
            return Answer(heard.reply)
        if heard.verb is Verb.STOP:
            if not self.faulty("deaf", now_s) and not self.faulty("stop-ignored", now_s):
                self.force_rate_n_s = None
                self.crosshead.order(now_s + self._card.drive.stop_latency_s, Halt())
            return Answer(heard.reply)
        if heard.verb in (Verb.START, Verb.JOG, Verb.RETREAT, Verb.FORCE_RATE):
            return self._move(heard, now_s)
        return Answer(NOT_UNDERSTOOD if heard.verb is Verb.UNKNOWN else heard.reply)

    def _move(self, heard: Heard, now_s: float) -> Answer:
        motion = self._frame.motion
        assert motion is not None
        speed = heard.numbers.get("speed_mm_min", motion.return_mm_min)
        if self.switched_off or abs(speed) > motion.speed_mm_min_max:
            return Answer(REFUSED)
        if heard.verb is Verb.FORCE_RATE:
            rate_n_s = heard.numbers.get("rate_n_s", 0.0)
            if rate_n_s <= 0:
                return Answer(REFUSED)
            answer = self._run(motion.approach_mm_min, None, heard, now_s)
            self.force_rate_n_s = rate_n_s
            return answer
        if heard.verb is Verb.START:
            return self._run(speed, None, heard, now_s)
        distance_mm = signed_distance_mm(heard.numbers)
        if heard.verb is Verb.RETREAT:
            distance_mm = -abs(distance_mm)
        goal_mm = self.crosshead.position_at(now_s) + distance_mm if "distance_mm" in heard.numbers else None
        away = heard.verb is Verb.RETREAT or distance_mm < 0
        return self._run(-abs(speed) if away else abs(speed), goal_mm, heard, now_s)

    def _run(self, speed_mm_min: float, goal_mm: float | None, heard: Heard, now_s: float) -> Answer:
        self.force_rate_n_s = None
        self._kept_s = now_s
        effective_s = now_s + self._card.drive.start_latency_s
        factor, until_s = self._slip
        speed_mm_s = speed_mm_min / 60 * (1 + self._card.drive.speed_error_percent / 100)
        self.crosshead.order(effective_s, Run(speed_mm_s * (factor if now_s < until_s else 1.0), goal_mm))
        return Answer(heard.reply, loads=speed_mm_min > 0)


def _crosshead(frame: FrameCard, card: SimulatorCard) -> Crosshead:
    motion, drive = frame.motion, card.drive
    up_mm = motion.travel_mm_min if motion is not None else -TRAVEL_MM
    down_mm = motion.travel_mm_max if motion is not None else TRAVEL_MM
    return Crosshead(
        acceleration_mm_s2=drive.acceleration_mm_s2,
        end_up_mm=up_mm if drive.end_up_mm is None else drive.end_up_mm,
        end_down_mm=down_mm if drive.end_down_mm is None else drive.end_down_mm,
    )
