"""One virtual machine: controller, bar, sensors and misfortunes, stepped exactly from event to event.

Pure: time is an argument, randomness comes from the card's seed, and any cut of the time gives the same rows.
The wire is elsewhere: here are numbers and understood commands only.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass

from daq.cards.frame import Fixture, FrameCard, InputName
from daq.errors import CardError
from simulator.card import SimulatorCard
from simulator.commands import Heard
from simulator.controller import INPUTS, TRAVEL_MM, Controller
from simulator.faults import (
    AnyFault,
    Drift,
    Fixturing,
    Glitch,
    HalvesLeft,
    MachineFault,
    NoiseBurst,
    PopIn,
    Rows,
    SensorFault,
    Slip,
    SpeedSlip,
    UnitSlip,
    WireFault,
)
from simulator.grip import Grip
from simulator.sampling import LinkSampler, Moment, SampleRows
from simulator.schedule import Schedule
from simulator.sensors import Sensor
from simulator.specimen import Bar, InHand, make_bar

TRUTHS_MAX = 10_000  # facts kept until they are taken
EVENTS_MAX = 1_000_000  # per call; more is a bug of this file, not a fault of the machine
CLEAR_MM = 0.05  # the crosshead must be this far off before a bar can be put in
GAP_MM = 2.0  # where neither card says (a frame without motion)

Act = Callable[[float], None]
SensorLevel = Glitch | SensorFault | UnitSlip | Drift | NoiseBurst


@dataclass(frozen=True, slots=True)
class Truth:
    """What really happened; for a truth file, never on the wire."""

    what: str
    time_s: float
    fields: Mapping[str, float | str | None]


class Machine:
    """The machine of one frame card, as the simulator card says it really is."""

    def __init__(self, frame: FrameCard, card: SimulatorCard, first: InHand | None = None) -> None:
        self._frame, self._card = frame, card
        self._fixture = _fixture(frame, card)
        self._contact_mm = card.contact.gap_mm or (frame.motion.gap_mm if frame.motion else GAP_MM)
        self._anvil_mm = self._contact_mm + (frame.motion.anvil_gap_mm if frame.motion else TRAVEL_MM)
        self._controller = Controller(frame, card)
        self._crosshead = self._controller.crosshead
        self._samplers = [LinkSampler(frame, card, number) for number in range(len(frame.links))]
        self._schedule = Schedule(card.faults)
        for fault in card.faults:
            self._check(fault)
        self._resting_n, self._resting_until_s = 0.0, math.inf
        self._touched = False
        self._awaiting: Bar | None = None
        self._grip = self._empty()
        self._moment = Moment(self._grip, 0.0, 0)
        self._planned: tuple[float, Act] | None = None
        self._truths: list[Truth] = []
        self.wire_faults: list[tuple[float, Rows | WireFault]] = []
        self.now_s = 0.0
        if first is not None:
            self.mount(first)
        self._refresh()

    # --- time ---------------------------------------------------------------------------------------
    def run_to(self, to_s: float) -> None:
        """Let time pass; rows and truths pile up until they are taken."""
        for _ in range(EVENTS_MAX):
            event_s, act = self._next_event()
            if event_s > to_s:
                break
            event_s = max(event_s, self.now_s)
            self._sample(event_s)
            self.now_s, self._planned = event_s, None
            act(event_s)
            self._refresh()
        else:
            raise AssertionError(f"no end of events at {self.now_s} s")
        self._sample(to_s)
        self.now_s = max(to_s, self.now_s)

    def take_rows(self) -> tuple[SampleRows, ...]:
        """Rows of all links since the last call."""
        taken = (sampler.take() for sampler in self._samplers)
        return tuple(rows for rows in taken if rows is not None)

    def advance(self, to_s: float) -> tuple[SampleRows, ...]:
        """`run_to` and `take_rows`."""
        self.run_to(to_s)
        return self.take_rows()

    def quiet_until_s(self) -> float:
        """Until then nothing happens by itself and rows may be made ahead; now, where a fault is at work."""
        if not all(sampler.steady for sampler in self._samplers):
            return self.now_s
        return self._next_event()[0]

    def rewind(self, to_s: float) -> tuple[int, ...]:
        """Go back within a quiet stretch; the number of rows of each link that were never asked for."""
        assert to_s <= self.now_s < self._next_event()[0]
        self.now_s = to_s
        return tuple(sampler.rewind(to_s) for sampler in self._samplers)

    def next_sample_s(self, link: int) -> float:
        """When the next row of a link is due."""
        return self._samplers[link].next_s()

    def take_truths(self) -> tuple[Truth, ...]:
        truths, self._truths = tuple(self._truths), []
        return truths

    # --- what it is ---------------------------------------------------------------------------------
    @property
    def position_mm(self) -> float:
        return self._crosshead.position_at(self.now_s)

    @property
    def speed_mm_s(self) -> float:
        return self._crosshead.speed_at(self.now_s)

    @property
    def moving(self) -> bool:
        return self._crosshead.moving

    @property
    def way_is_clear(self) -> bool:
        """Room to put in a bar; at the start position there always is."""
        return self.position_mm <= max(self._contact_mm - CLEAR_MM, 0.0)

    @property
    def bar(self) -> Bar | None:
        return self._grip.bar

    @property
    def broken(self) -> bool:
        return self._grip.parting is not None

    @property
    def force_n(self) -> float:
        """Static force through the bar, N; ringing and weights left out."""
        law = self._grip.law
        return 0.0 if law is None or self.broken else law.force_at(self.position_mm)

    def inputs(self) -> dict[InputName, bool]:
        """What the status word would say now."""
        return self._controller.inputs(self.now_s)

    # --- what is done to it -------------------------------------------------------------------------
    def command(self, heard: Heard, now_s: float) -> str | None:
        """Obey one command; the answer, or None where the machine says nothing."""
        self.run_to(now_s)
        answer = self._controller.obey(heard, now_s)
        if answer.loads:
            self._schedule.started(now_s)
            self._touched = self._touched and self.force_n > 0
        if answer.loads and self._touched:
            self._close_loop(now_s)
        self._settle()
        return answer.reply

    def mount(self, hand: InHand) -> Bar:
        """Clear the fixture, put in a bar; a crosshead in the way is raised from the machine's own panel."""
        bar = make_bar(hand, self._card.bar, self._card.contact, self._fixture, self._card.seed)
        self._grip = self._empty()
        self._awaiting = bar
        self._fill_or_raise()
        self._settle()
        return bar

    def raise_crosshead(self) -> None:
        """To the start position, from the machine's own panel."""
        if not self._controller.switched_off:
            self._controller.raise_by_hand(self.now_s)
        self._settle()

    def switch(self, name: InputName, on: bool) -> None:
        """Shield, emergency stop or drive fault; hard-wired: the drive stops whatever the software says."""
        self._controller.switch(name, on, self.now_s)
        self._settle()

    def strike(self, fault: AnyFault) -> None:
        """A misfortune, now, whatever its anchors say."""
        self._check(fault)
        self._apply(fault, self.now_s)
        self._settle()

    def clear(self) -> None:
        """All misfortunes end, switches go back; what broke stays broken."""
        self._schedule.clear()
        self._controller.clear()
        self._resting_n, self._resting_until_s = 0.0, math.inf
        for sampler in self._samplers:
            for sensor in sampler.sensors:
                sensor.clear()
        self._settle()

    # --- what comes next ----------------------------------------------------------------------------
    def _next_event(self) -> tuple[float, Act]:
        if self._planned is None:
            self._planned = min(self._coming(), key=lambda item: item[0])
        return self._planned

    def _coming(self) -> list[tuple[float, Act]]:
        """Everything that will happen by itself, with its time."""
        coming: list[tuple[float, Act]] = [
            (self._controller.next_s(), self._controller_acts),
            (self._schedule.next_s(), self._fault_due),
            (self._resting_until_s, self._halves_go),
        ]
        law = self._grip.law
        if law is None or self._grip.parting is not None:
            return coming
        levels: tuple[tuple[float, Act], ...] = (
            (self._grip.break_n, self._breaks),
            (self._schedule.next_force_n(), self._force_due),
        )
        force_n = law.force_at(self.position_mm)
        for level_n, act in levels:
            if force_n >= level_n:
                coming.append((self.now_s, act))
            elif level_n < math.inf and self._crosshead.moving:
                coming.append((self._crosshead.reaches_s(law.position_at(level_n)), act))
        if not self._touched:
            past = self.position_mm > law.origin_mm
            coming.append((self.now_s if past else self._crosshead.reaches_s(law.origin_mm), self._touches))
        return coming

    def _controller_acts(self, now_s: float) -> None:
        if self._controller.act(now_s):
            self._tell("watchdog", {})
        if self._touched and self._crosshead.moving and not self._crosshead.following:
            self._close_loop(now_s)  # told while a stop was still under way: from here on
        self._fill_or_raise()

    def _fill_or_raise(self) -> None:
        """The bar in hand goes in when there is room; a crosshead that stands in the way is raised first."""
        if self._awaiting is None:
            return
        if self.way_is_clear:
            bar, self._awaiting = self._awaiting, None
            self._fill(bar)
        elif not self._crosshead.moving and not self._controller.switched_off:
            self._controller.raise_by_hand(self.now_s)

    def _touches(self, now_s: float) -> None:
        self._touched = True
        self._schedule.touched(now_s)
        self._tell("touched", {})
        self._close_loop(now_s)

    def _close_loop(self, now_s: float) -> None:
        """The machine's own force loop takes over where it is wanted and there is something to press on."""
        rate_n_s, law = self._controller.force_rate_n_s, self._grip.law
        whole = law is not None and self._grip.parting is None
        if rate_n_s is not None and law is not None and whole and not self._crosshead.halting:
            self._crosshead.follow(now_s, law.force_at(self.position_mm), rate_n_s, law)

    def _breaks(self, now_s: float) -> None:
        bar, law = self._grip.bar, self._grip.law
        assert bar is not None and law is not None
        force_n = min(law.force_at(self.position_mm), self._grip.break_n)
        self._crosshead.release(now_s)
        self._grip.part(now_s, force_n)
        weakest = bar.weakest
        self._tell(
            "broke",
            {
                "specimen": bar.number,
                "force_n": force_n,
                "stress_mpa": force_n * bar.stress_per_n,
                "position_mm": self.position_mm,
                "flaw": weakest.population if weakest else None,
                "flaw_mpa": weakest.strength_mpa if weakest else None,
                "at_mm": weakest.x_mm if weakest else None,
            },
        )

    def _fault_due(self, now_s: float) -> None:
        for fault in self._schedule.due(now_s, -math.inf):
            self._apply(fault, now_s)

    def _halves_go(self, _: float) -> None:
        self._resting_n, self._resting_until_s = 0.0, math.inf

    def _force_due(self, now_s: float) -> None:
        for fault in self._schedule.due(-math.inf, self._schedule.next_force_n()):
            self._apply(fault, now_s)

    # --- misfortunes --------------------------------------------------------------------------------
    def _check(self, fault: AnyFault) -> None:
        if isinstance(fault, SensorLevel) and not self._sensors(fault.channel):
            names = ", ".join(channel.name for channel in self._frame.channels)
            raise CardError((f"fault {fault.kind}: channel = {fault.channel}: one of {names}, or a role",))

    def _sensors(self, channel: str) -> list[Sensor]:
        """By name, or by role where no channel has that name."""
        every = [sensor for sampler in self._samplers for sensor in sampler.sensors]
        named = [sensor for sensor in every if sensor.name == channel]
        return named or [sensor for sensor in every if sensor.role == channel]

    def _apply(self, fault: AnyFault, now_s: float) -> None:
        self._tell("fault", {"kind": fault.kind})
        if isinstance(fault, SensorLevel):
            for sensor in self._sensors(fault.channel):
                sensor.begin(fault, now_s)
        elif isinstance(fault, Rows | WireFault):
            self.wire_faults.append((now_s, fault))
        elif isinstance(fault, MachineFault | SpeedSlip):
            self._controller.strike(fault, now_s)
        elif isinstance(fault, HalvesLeft):
            self._resting_n = fault.force_n if self._frame.cell.position == "supports" else 0.0
            self._resting_until_s = math.inf if fault.for_s is None else now_s + fault.for_s
        else:
            self._apply_to_bar(fault, now_s)

    def _apply_to_bar(self, fault: Slip | PopIn | Fixturing, now_s: float) -> None:
        position_mm, following = self.position_mm, self._crosshead.following
        if isinstance(fault, Slip):
            self._grip.slip(position_mm, fault.percent)
        elif isinstance(fault, PopIn):
            self._grip.crack(position_mm, fault)
        elif fault.kind == "blocked":
            self._grip = Grip.blocked(self._card, self._contact_mm, fault.stiffness_n_mm)
        else:
            self._grip = self._empty()
        if following:
            self._close_loop(now_s)

    # --- inside -------------------------------------------------------------------------------------
    def _empty(self) -> Grip:
        return Grip(self._card, None, math.inf, self._anvil_mm)

    def _fill(self, bar: Bar) -> None:
        self._grip = Grip(self._card, bar, self._contact_mm, self._anvil_mm)
        self._touched = False
        self._schedule.mounted()
        weakest = bar.weakest
        self._tell(
            "mounted",
            {
                "specimen": bar.number,
                "break_n": bar.break_n if weakest else None,
                "strength_mpa": weakest.nominal_mpa if weakest else None,
                "at_mm": weakest.x_mm if weakest else None,
            },
        )

    def _sample(self, until_s: float) -> None:
        for sampler in self._samplers:
            times_s = sampler.due(until_s)
            if times_s.size:
                sampler.note(times_s, self._crosshead.positions(times_s), self._moment)

    def _settle(self) -> None:
        """Something was done: do at once what follows from it at once."""
        self._refresh()
        self.run_to(self.now_s)

    def _refresh(self) -> None:
        """Something changed: plan anew, and look at the inputs again."""
        self._planned = None
        active = self.inputs()
        bits = sum(1 << number for number, name in enumerate(INPUTS) if active[name])
        self._moment = Moment(self._grip, self._resting_n, bits)

    def _tell(self, what: str, fields: Mapping[str, float | str | None]) -> None:
        if len(self._truths) < TRUTHS_MAX:
            self._truths.append(Truth(what, self.now_s, fields))


def _fixture(frame: FrameCard, card: SimulatorCard) -> Fixture:
    name = card.contact.fixture or frame.fixtures[0].name
    for fixture in frame.fixtures:
        if fixture.name == name:
            return fixture
    names = ", ".join(fixture.name for fixture in frame.fixtures)
    raise CardError((f"simulator {card.name}: contact.fixture = {name}: one of {names}",))
