"""Cross rules of a frame card's motion: speeds, travel, watchdog, templates (a wrong one moves a machine)."""

from __future__ import annotations

import string
from collections.abc import Iterator, Mapping

from daq.cards.describe import Path
from daq.cards.faults import Fault
from daq.cards.frame import Link, Motion

# What each command may and must say; nothing else is known when it is sent.
PLACEHOLDERS: Mapping[str, tuple[frozenset[str], frozenset[str]]] = {
    # command: (must, may)
    "start": (frozenset({"speed_mm_min"}), frozenset()),
    "stop": (frozenset(), frozenset()),
    "jog": (frozenset({"distance_mm"}), frozenset({"speed_mm_min"})),
    "retreat": (frozenset({"speed_mm_min"}), frozenset({"distance_mm"})),
    "force_rate": (frozenset({"rate_n_s"}), frozenset({"speed_mm_min"})),
}
# A speed, a distance and a rate that a template must be able to write.
SAMPLE_NUMBERS = {"speed_mm_min": -0.125, "distance_mm": 12.5, "rate_n_s": 50.0}


def motion_faults(motion: Motion, links: Mapping[str, Link] | None) -> Iterator[Fault]:
    """Every rule of the motion table; links is None when the card's links could not be read."""
    yield from _speed_faults(motion)
    yield from _travel_faults(motion)
    yield from template_faults(motion)
    yield from _watchdog_faults(motion)
    if links is None:
        return
    link = links.get(motion.link)
    if link is None:
        do = "choose one of " + ", ".join(links)
        yield Fault(("motion", "link"), "the name of one of the links", do)
    else:
        yield from _reply_faults(motion, link)
        yield from _start_command_faults(motion, links)


def _speed_faults(motion: Motion) -> Iterator[Fault]:
    low, high = motion.speed_mm_min_min, motion.speed_mm_min_max
    if low >= high:
        allowed = f"a speed above speed_mm_min_min = {low:g} mm/min"
        yield Fault(("motion", "speed_mm_min_max"), allowed, "correct the speed range of the drive")
        return
    for key in ("approach_mm_min", "return_mm_min"):
        speed = getattr(motion, key)
        if not low <= speed <= high:
            allowed = f"from {low:g} to {high:g} mm/min, the speed range of the drive"
            yield Fault(("motion", key), allowed, "choose a speed in this range", f"{speed!r}")


def _travel_faults(motion: Motion) -> Iterator[Fault]:
    if motion.travel_mm_min >= motion.travel_mm_max:
        allowed = f"a position above travel_mm_min = {motion.travel_mm_min:g} mm"
        yield Fault(("motion", "travel_mm_max"), allowed, "correct the ends of the travel")
        return
    travel_mm = motion.travel_mm_max - motion.travel_mm_min
    for key in ("gap_mm", "backoff_mm"):
        if getattr(motion, key) >= travel_mm:
            allowed = f"less than the whole travel of {travel_mm:g} mm"
            yield Fault(("motion", key), allowed, "correct it, or the ends of the travel")


def _watchdog_faults(motion: Motion) -> Iterator[Fault]:
    alive = motion.keep_alive
    if alive is not None and alive.every_s > alive.lapse_s / 2:
        allowed = f"at most half of lapse_s = {alive.lapse_s:g} s, so that one late command does not stop it"
        yield Fault(("motion", "keep_alive", "every_s"), allowed, "send it more often")


def template_faults(motion: Motion) -> Iterator[Fault]:
    """Templates: right placeholders, printable numbers, plain ASCII, no line end inside, none alike."""
    sent: dict[str, str] = {}
    for key, text in _templates(motion).items():
        at: Path = ("motion", key, "send")
        if not text.isascii():
            yield Fault(at, "plain ASCII text", "write the bytes that the machine expects")
        if any(char in text for char in motion.line_end):
            yield Fault(at, "no character of motion.line_end; it is added by itself", "remove it")
        yield from _placeholder_faults(at, key, text)
        other = sent.setdefault(_stem(text), key)
        if other != key:
            allowed = f"another text than motion.{other}.send: the machine could not tell them apart"
            yield Fault(at, allowed, "correct one of the two")


def _templates(motion: Motion) -> dict[str, str]:
    keys = ("stop", "start", "jog", "retreat", "force_rate", "keep_alive", "status")
    return {key: getattr(motion, key).send for key in keys if getattr(motion, key) is not None}


def _placeholder_faults(at: Path, key: str, text: str) -> Iterator[Fault]:
    must, may = PLACEHOLDERS.get(key, (frozenset[str](), frozenset[str]()))
    try:
        names = _names(text)
        foreign = names - must - may
        if not foreign:
            text.format(**{name: SAMPLE_NUMBERS[name] for name in names})
    except (ValueError, IndexError, KeyError, AttributeError, TypeError):
        allowed = (
            "placeholders such as {speed_mm_min} or {speed_mm_min:+.3f}; a brace itself is written twice"
        )
        yield Fault(at, allowed, "correct the braces or the number format")
        return
    if foreign:
        allowed = "only " + _braced(must | may) if must | may else "no placeholder"
        yield Fault(at, f"{allowed} in this command", "remove " + _braced(foreign))
    for name in sorted(must - names):
        yield Fault(
            at, f"{_braced({name})} somewhere in the command", "add it where the machine expects the number"
        )


def _names(text: str) -> frozenset[str]:
    """Placeholders of a template; ValueError for nested, positional, converted or attribute ones."""
    names = set()
    for _literal, name, spec, conversion in string.Formatter().parse(text):
        if name is None:
            continue
        if not name.isidentifier() or conversion or "{" in (spec or ""):
            raise ValueError(name)
        names.add(name)
    return frozenset(names)


def _stem(text: str) -> str:
    """The fixed words at the start of a command: what the machine tells commands apart by."""
    return text.split("{", 1)[0].strip() if "{" in text else text.strip()


def _braced(names: frozenset[str] | set[str]) -> str:
    return " and ".join("{" + name + "}" for name in sorted(names))


def _reply_faults(motion: Motion, link: Link) -> Iterator[Fault]:
    keys = ("start", "stop", "jog", "retreat", "force_rate", "keep_alive", "status")
    for key in keys:
        part = getattr(motion, key)
        if part is None or not part.reply:
            continue
        at: Path = ("motion", key, "reply")
        if link.packets is not None and link.packets.reply_sync is None:
            do = "add reply_sync to [links.packets], or leave the reply empty"
            yield Fault(at, f"no reply, because link '{link.name}' has no reply_sync", do)
        if not part.reply.isascii():
            yield Fault(at, "plain ASCII text", "write the bytes that the machine sends")
        if link.lines is not None and _looks_like_row(part.reply, link.lines.prefix):
            start = f"'{link.lines.prefix}'" if link.lines.prefix else "a digit or a sign"
            allowed = f"a text that does not begin with {start}, as the rows of link '{link.name}' do"
            yield Fault(at, allowed, "a reply would be read as a row: correct prefix or reply")
        if key != "status" and motion.status is not None and _alike(part.reply, motion.status.reply):
            allowed = f"a text that is not confused with motion.status.reply = '{motion.status.reply}'"
            yield Fault(at, allowed, "correct one of the two")


def _looks_like_row(reply: str, prefix: str) -> bool:
    return reply.startswith(prefix) if prefix else reply[0] in "+-.0123456789"


def _alike(one: str, other: str) -> bool:
    return one.startswith(other) or other.startswith(one)


def _start_command_faults(motion: Motion, links: Mapping[str, Link]) -> Iterator[Fault]:
    stems = {
        _stem(text): key
        for key, text in _templates(motion).items()
        if key not in ("stop", "keep_alive", "status")
    }
    for number, link in enumerate(links.values()):
        if link.name != motion.link or not link.start_command:
            continue
        for stem, key in stems.items():
            if stem and link.start_command.strip().startswith(stem):
                allowed = f"a command that cannot move the frame (this one begins like motion.{key}.send)"
                yield Fault(("links", number, "start_command"), allowed, "remove it")
