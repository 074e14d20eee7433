"""How midspan behaved towards people and machine in a scenario, against the machine's own truth. Complaints as lines.

A *loading stop* is a stop that ends a loading: it leads to a latched state, a break, or the closing of the run. The
stops at touch and preload are part of a loading and are not meant.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from math import inf

from daq.cards.derived import block_column, force_channel, value_of
from daq.stream.entry import Entry, Kind
from daq.stream.payloads import unpack_block, unpack_event, unpack_raw
from daq.watch.states import ARMED, BROKEN, LATCHED, WATCHED
from daq.watch.values import State, Verdict
from simulator.commands import Ear, Verb
from tests.scenarios.draw import Plan
from tests.scenarios.play import Done, Player, Said

MOTIONS = frozenset({Verb.START, Verb.JOG, Verb.RETREAT, Verb.FORCE_RATE})
LATCHED_WORDS = frozenset(state.value for state in LATCHED)
ENDED_WORDS = LATCHED_WORDS | {state.value for state in BROKEN} | {State.UNLOADING.value}
ARMED_WORDS = frozenset(state.value for state in ARMED)
WATCHED_WORDS = frozenset(state.value for state in WATCHED)
CALLED = (Verdict.SUDDEN_BREAK.value, Verdict.GRADUAL_FAILURE.value)
HUM_ROW = 18
FORCE_LIMITS = ("hard_n", "working_n", "fixture_n", "specimen_n", "method_n")
NS = 1e-9
MARGIN_S = 0.05
LAPSE_MARGIN_S = 0.2
NOTICED_S = 2.0
CLOCK_S = 0.03  # sample times of a device whose clock is 0.3 % off lag by so much in the first seconds

# misfortunes that take away the force signal, or make it say something untrue
BLINDING = frozenset(
    (
        "freeze",
        "zeros",
        "nan",
        "saturation",
        "wrong-polarity",
        "unit-slip",
        "stream-end",
        "garbage",
        "reconnect",
        "dropped",
    )
)
GRAVE = frozenset(("freeze", "zeros", "nan", "saturation", "stream-end", "reconnect"))
# misfortunes and deeds that are no reason to stop
HARMLESS = frozenset(
    ("glitch", "slip", "pop-in", "duplicated", "noise", "drift", "note", "start", "jog", "return", "reset")
)


def conduct_checks(player: Player) -> Iterator[str]:
    story = Story(player)
    yield from obedient(story)
    yield from refusals(story)
    yield from limits_obeyed(story)
    yield from stands(story)
    yield from breaks_called(story)
    yield from nothing_else_called(story)
    yield from losses_noticed(story)
    yield from calm(story)
    yield from mended(story)


@dataclass(frozen=True, slots=True)
class Fact:
    """Something that happened to the bar or the machine, from the machine's own truth."""

    what: str
    time_s: float
    force_n: float = 0.0


class Story:
    """One played scenario, put in order for the judges."""

    def __init__(self, player: Player) -> None:
        self.player, self.plan, self.events = player, player.plan, player.bench.events
        truths = player.truths
        self.breaks = [
            Fact("broke", t.time_s, float(t.fields["force_n"] or 0)) for t in truths if t.what == "broke"
        ]
        self.faults = [Fact(str(t.fields["kind"]), t.time_s) for t in truths if t.what == "fault"]
        self.loadings = list(self._loadings())

    def _loadings(self) -> Iterator[tuple[float, float]]:
        """From start to the stop that ends the loading."""
        started: float | None = None
        for event in self.events:
            if event["event"] == "started":
                started = event["time_s"]
            elif started is not None and _ends(event):
                yield started, event["time_s"]
                started = None
        if started is not None:
            yield started, inf

    def state_at(self, time_s: float) -> str:
        words = [e["to"] for e in self.events if e["event"] == "state" and e["time_s"] <= time_s]
        return words[-1] if words else State.AT_REST.value

    def blind_at(self, time_s: float) -> bool:
        """Whether a misfortune that blinds has begun and not been put right."""
        cleared = self.player.cleared_s or inf
        return any(
            f.what in BLINDING and f.time_s <= time_s and not f.time_s < cleared < time_s for f in self.faults
        )


def _ends(event: dict[str, object]) -> bool:
    return event["event"] == "run_closed" or (event["event"] == "state" and event["to"] in ENDED_WORDS)


# --- stop wins, and nothing moves without a new start


def obedient(story: Story) -> Iterator[str]:
    """After a loading stop: no motion command without reset and start, but for one back-off after a proven break."""
    player = story.player
    frame = player.plan.frame
    assert frame.motion is not None
    link = [one.name for one in frame.links].index(frame.motion.link)
    ear, entries = Ear(frame, link), player.bench.entries
    asked = sorted(player.done, key=lambda done: done.entry)
    may: set[Verb] = set()
    for number, entry in enumerate(entries):
        while asked and asked[0].entry <= number:
            may = _allowed(asked.pop(0), may)
        if entry.kind is Kind.EVENT:
            event = unpack_event(entry.payload)
            if _ends(event) and not (Verb.RETREAT in may and event.get("to") == State.BROKEN_UNLOADED.value):
                may = set()
            if event["event"] == "fracture" and event["verdict"] in CALLED and frame.motion.backoff_auto:
                may = {Verb.RETREAT}
        elif entry.kind is Kind.RAW and (raw := unpack_raw(entry.payload)).sent and raw.link == link:
            for heard in ear.feed(raw.data):
                if heard.verb in MOTIONS and heard.verb not in may and not _stopped_at_once(entries, number):
                    yield f"{entry.monotonic_ns * 1e-9:.3f} s: {raw.data!r} was sent without a start"
                if heard.verb in (Verb.RETREAT, Verb.JOG):
                    may.discard(heard.verb)


def _allowed(done: Done, may: set[Verb]) -> set[Verb]:
    """What the person's deed permits the bench to send from now on."""
    if done.said is not Said.OBEYED:
        return may
    if "start" in done.what and "reset" not in done.what:
        return {Verb.START, Verb.FORCE_RATE}
    if "jog" in done.what:
        return {Verb.JOG, Verb.RETREAT}
    if "return" in done.what:
        return {Verb.RETREAT}
    return set() if "stop" in done.what or "closes" in done.what else may


def _stopped_at_once(entries: Sequence[Entry], number: int) -> bool:
    """Sent and stopped in one breath: a block that holds both the beginning and the end of a motion."""
    now_ns = entries[number].monotonic_ns
    later = [e for e in entries[number + 1 : number + 6] if e.monotonic_ns == now_ns and e.kind is Kind.RAW]
    return any(unpack_raw(e.payload).sent for e in later)


def refusals(story: Story) -> Iterator[str]:
    """In a latched state nothing but a reset is obeyed; attempts without one are refused."""
    for done in story.player.done:
        if "without a reset" in done.what and done.said is Said.OBEYED:
            yield f"{done.time_s:.3f} s: {done.what}, and was obeyed"


def limits_obeyed(story: Story) -> Iterator[str]:
    """While a run is armed: two samples in a row above a force limit, or one that is no number, and the STOP is
    written in the same breath as that sample is recorded.
    """
    source, column, scale = _force_column(story.plan)
    limit_n, before_n, armed = inf, 0.0, False
    entries = story.player.bench.entries
    stops_ns = {e.monotonic_ns for e in entries if e.kind is Kind.RAW and _is_stop(e, story.plan)}
    for entry in entries:
        if entry.kind is Kind.EVENT:
            event = unpack_event(entry.payload)
            armed = (armed or event["event"] == "started") and not _ends(event)
            if event["event"] == "limits":
                limit_n = min(event[key] for key in FORCE_LIMITS if event[key] is not None)
            elif event["event"] == "limit_tightened" and event["key"] == "force_n_max":
                limit_n = event["value"]
        elif entry.kind is Kind.BLOCK and (block := unpack_block(entry.payload)).source == source:
            for count in block.counts[:, column].tolist():
                force_n = scale(count)
                passed = force_n != force_n or (force_n > limit_n and before_n > limit_n)
                if armed and passed and entry.monotonic_ns not in stops_ns:
                    yield f"{entry.monotonic_ns * NS:.3f} s: {force_n:.0f} N, limit {limit_n:.0f} N, and no stop"
                    return
                if passed:
                    armed = False
                before_n = force_n


def _force_column(plan: Plan) -> tuple[int, int, Callable[[float], float]]:
    """(link, column, counts to gross N), from the card."""
    channel = force_channel(plan.frame)
    link, column = block_column(plan.frame, channel)
    return link, column, lambda count: value_of(channel, count)


def _is_stop(entry: Entry, plan: Plan) -> bool:
    assert plan.frame.motion is not None
    raw = unpack_raw(entry.payload)
    return raw.sent and raw.data.startswith(plan.frame.motion.stop.send.encode())


def stands(story: Story) -> Iterator[str]:
    """The machine stands within stop latency and margin, or the failed stop is told."""
    plan, player = story.plan, story.player
    motion, drive = plan.frame.motion, plan.card.drive
    assert motion is not None and motion.keep_alive is not None
    for _, ended_s in story.loadings:
        quick_s = ended_s + drive.stop_latency_s + MARGIN_S + plan.wake_s
        lapsed_s = ended_s + max(motion.keep_alive.lapse_s, drive.stop_latency_s) + LAPSE_MARGIN_S
        unheard = plan.kinds & {"deaf", "reconnect", "stop-ignored", "garbage"}
        stuck = "stop-ignored" in plan.kinds
        until_s = min([d.time_s for d in player.done if d.time_s > ended_s and _moves(d)], default=inf)
        backed = [
            e["time_s"] - MARGIN_S for e in story.events if e["event"] == "returned" and e["time_s"] > ended_s
        ]
        until_s = min([until_s, *backed])
        moving = [s.time_s for s in player.path if s.moving and ended_s < s.time_s < until_s]
        late = [at for at in moving if at > (lapsed_s if unheard else quick_s)]
        failed = [e["time_s"] for e in story.events if e["event"] == "stop_failed" and e["time_s"] > ended_s]
        if late and not stuck:
            yield f"the machine moves at {late[0]:.3f} s, stopped at {ended_s:.3f} s"
        told_by_s = ended_s + max(0.3, 1.5 * motion.stop_latency_s) + 0.6
        if any(at > told_by_s for at in moving) and not any(at <= told_by_s for at in failed):
            yield f"the machine moves on after the stop at {ended_s:.3f} s, and nobody was told"


def _moves(done: Done) -> bool:
    """Deeds after which the crosshead may move by right."""
    by_hand = "lays bar" in done.what or "panel" in done.what
    return by_hand or (
        done.said is Said.OBEYED and any(word in done.what for word in ("start", "jog", "return"))
    )


# --- breaks


def arm_n(plan: Plan) -> float:
    """From here on the fracture watch must be awake (daq.watch.fracture), with a margin for the forecast's lag."""
    expected, cell = plan.expected, plan.frame.cell
    low = min(0.02 * cell.capacity_n, 0.1 * expected.load_p50_n)
    awake_n = max(low, 20.0 * (cell.noise_quiet_n or 0.0))
    return 1.3 * awake_n + 3.0 * expected.load_p50_n / plan.to_break_s / plan.rate_hz


def allowed_s(plan: Plan) -> float:
    """The latest stop after a break that still counts as found in time; at most what the soak allows, and the wire."""
    period_s = 1.0 / plan.rate_hz
    how = plan.card.after_break
    ringing_s = 0.05 if how.kind == "sudden" and how.ring_hz else max(1.2, 4.0 * how.fall_s)
    return (
        max(0.015, 4.5 * period_s)
        + ringing_s
        + 3.0 * period_s
        + plan.card.electronics.batch_s
        + plan.wake_s
        + 0.01
    )


def words_for_a_break(plan: Plan) -> tuple[str, ...]:
    """Ringing that is sampled too slowly may stand still below zero, as a mirrored signal does: that is unclear."""
    how = plan.card.after_break
    undersampled = how.kind == "sudden" and 2.0 * how.ring_hz > plan.rate_hz
    return (*CALLED, Verdict.UNCLEAR.value) if undersampled else CALLED


def breaks_called(story: Story) -> Iterator[str]:
    """A break while loading is called, in time; where the signal was lost it is at least not driven on."""
    plan = story.plan
    for fact in story.breaks:
        inside = [(a, b) for a, b in story.loadings if a <= fact.time_s <= b]
        if not inside or fact.force_n < arm_n(plan) or story.state_at(fact.time_s) not in WATCHED_WORDS:
            continue
        _, ended_s = inside[0]
        if ended_s > fact.time_s + NOTICED_S:
            yield f"the bar broke at {fact.time_s:.3f} s and the machine was stopped at {ended_s:.3f} s"
        called = [e for e in story.events if e["event"] == "fracture" and e["time_s"] >= fact.time_s - 0.01]
        if called and called[0]["time_s"] <= fact.time_s + allowed_s(plan):
            continue
        other = ended_s <= fact.time_s + allowed_s(plan) and not called
        if not (other or story.blind_at(fact.time_s + allowed_s(plan))):
            at = f"called at {called[0]['time_s']:.3f} s" if called else "never called"
            yield f"break at {fact.time_s:.3f} s, {fact.force_n:.0f} N: {at} ({allowed_s(plan):.3f} s allowed)"


def nothing_else_called(story: Story) -> Iterator[str]:
    """Only a break is called a break; a lasting drop of another kind may be called unclear.

    A signal that goes over to a larger unit falls as at a break, and may be called one: only the stop is asked for.
    """
    for event in story.events:
        if event["event"] != "fracture":
            continue
        true = [f for f in story.breaks if event["time_s"] - 5.0 <= f.time_s <= event["time_s"] + CLOCK_S]
        if not true and event["verdict"] in CALLED and "unit-slip" not in story.plan.kinds:
            yield f"{event['time_s']:.3f} s: {event['verdict']} was called, and no bar has broken"


def losses_noticed(story: Story) -> Iterator[str]:
    """A force signal that is gone for good stops the machine."""
    plan, period_s = story.plan, 1.0 / story.plan.rate_hz
    lasting = {f.kind for f in plan.card.faults if getattr(f, "for_s", None) is None}
    on_force = {f.kind for f in plan.card.faults if getattr(f, "channel", "force") == "force"}
    for fact in story.faults:
        if fact.what not in GRAVE & lasting & on_force or story.state_at(fact.time_s) not in WATCHED_WORDS:
            continue
        link = next(f for f in plan.card.faults if f.kind == fact.what)
        if getattr(link, "link", None) not in (None, plan.frame.links[0].name):
            continue
        ended = [b for a, b in story.loadings if a <= fact.time_s < b]
        if ended and ended[0] > fact.time_s + max(0.3, 13.0 * period_s) + plan.wake_s:
            yield f"{fact.what} at {fact.time_s:.3f} s, stopped at {ended[0]:.3f} s"


# --- alarms


def calm(story: Story) -> Iterator[str]:
    """What is no reason to stop does not stop the first loading; without any misfortune nothing is even cautioned."""
    plan = story.plan
    first = [e for e in story.events if e["event"] == "run_closed"][:1]
    if not plan.kinds - HARMLESS and not _hard_glitch(plan):
        verdict = first[0]["verdict"] if first else "none"
        if verdict not in words_for_a_break(plan):
            reason = first[0]["reason"] if first else "no run"
            yield f"nothing grave happened, and the loading ended as {verdict}: {reason}"
    wedged = plan.card.after_break.residual_percent > 0  # its pieces do carry load for a while
    if not plan.kinds:
        for event in story.events:
            told = event["event"] == "residual" and wedged
            told |= event["event"] == "fracture" and event["verdict"] in words_for_a_break(plan)
            told |= plan.card.force.hum > 0 and (event["event"] == "hum" or event.get("row") == HUM_ROW)
            if event["severity"] != "remark" and not told:
                yield f"{event['time_s']:.3f} s: {event['event']} ({event['severity']}) although nothing was wrong"


def _hard_glitch(plan: Plan) -> bool:
    """A spike that passes a force limit by itself, or that two samples show before the watch is awake."""
    glitches = [f for f in plan.card.faults if f.kind == "glitch"]
    return any(
        g.samples > 1 or g.size + plan.expected.load_p999_n > plan.frame.cell.capacity_n for g in glitches
    )


def mended(story: Story) -> Iterator[str]:
    """With everything put right, and a reset, the next bar is loaded and breaks as if nothing had been."""
    plan, player = story.plan, story.player
    if not plan.again or "stopper" in plan.kinds:
        return
    verdicts = [
        e["verdict"] for e in story.events if e["event"] == "run_closed" and e["run_id"] == "run-S-2-2"
    ]
    if not verdicts or verdicts[-1] not in words_for_a_break(plan):
        later = [d for d in player.done if d.said is Said.REFUSED and d.time_s > (player.cleared_s or inf)]
        refused = [f"{d.what}: {'; '.join(d.missing)}" for d in later]
        yield f"after everything was put right the second bar ended as {verdicts}; refused: {refused}"
