"""The words of every view: states, instructions, faults, results, numbers. Pure; holds nothing."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

BAR_CELLS = 24  # of the load bar in text views
BAR_FULL_PERCENT = 120.0
LAG_TOLD_S = 2.0  # of the recorder; it syncs ten times a second
ENDED = "midspan has ended"  # the station's last word in an orderly end

INSTRUCTIONS: Mapping[str, str] = {
    "at rest": "mount the next bar, shut the shield, then press m",
    "ready": "hands off; shield shut, eyes protected? start: hold g, or G O",
    "approaching": "approaching; hands off",
    "in contact": "in contact; hands off",
    "seating": "seating; hands off",
    "loading": "loading; watch the bar, stand clear",
    "holding": "holding; stand clear",
    "broken - unloaded": "broken; wait for standstill, keep the pieces together",
    "broken? - still loaded": "LOAD STILL ON THE BAR - keep the shield shut",
    "stopped": "stopped; look at the frame, then reset: r",
    "unloading": "unloading; hands off",
    "returning": "returning; hands off",
    "signal lost": "no signal - the bar may be loaded; keep the shield shut",
    "overload": "overload - check zero and a check weight before going on",
    "shield open": "shield open; shut it, then reset: r",
    "emergency stop": "emergency stop; release it at the machine, then reset: r",
    "unknown - look at the frame": "look at the frame: is a bar mounted or loaded? then reset: L",
    ENDED: "the daemon was ended in order; start `midspan serve` again",
    "bench process does not answer": "midspan cannot see or stop the frame - USE THE EMERGENCY STOP AT THE MACHINE",
}
SILENT = "station silent"  # not "no contact": at a frame that is a roller without a bar
NOT_CURRENT = "nothing heard from midspan: look at the frame; if it moves, stop it at the machine"
TARING = "measuring the tare; touch nothing"
ALL_DONE = "every bar of the series is broken; collect the pieces"
BACK_OFF_FIRST = "first back the crosshead off (hold b, or B O), then mount the next bar"
REPLAYED = "the record ends here; p plays it again"
READY_MONITOR_ONLY = "start the machine by its own controls; midspan can NOT stop it"

Numbers = Mapping[str, Any]


def instruction(
    state: str, *, run_open: bool, monitor_only: bool, all_done: bool = False, down: bool = False
) -> str:
    """What the person at the frame does now. down: the crosshead stands where the last loading left it."""
    if state == "at rest" and (run_open or all_done):
        return TARING if run_open else ALL_DONE
    if state == "at rest" and down:
        return BACK_OFF_FIRST
    if monitor_only and state == "ready":
        return READY_MONITOR_ONLY
    return INSTRUCTIONS.get(state, "")


def number(value: float | None, decimals: int, unit: str = "") -> str:
    """A number with its unit, or a dash where there is none; never a negative zero."""
    if value is None or value != value:
        return "-"
    rounded = round(value, decimals) + 0.0
    return f"{rounded:.{decimals}f} {unit}".rstrip()


def load_bar(percent: float, low_percent: float | None, high_percent: float | None) -> str:
    """Share of the expected break load as a bar of fixed width; the break band is marked by '=' under it."""
    cells = []
    for cell in range(BAR_CELLS):
        middle = (cell + 0.5) * BAR_FULL_PERCENT / BAR_CELLS
        in_band = (
            low_percent is not None and high_percent is not None and low_percent <= middle <= high_percent
        )
        cells.append("#" if middle <= percent else "=" if in_band else ".")
    return "[" + "".join(cells) + "]"


def expected_text(summary: Numbers) -> str:
    """Percent of the expected break load, as a bar and a number."""
    percent, load_n = summary.get("expected_percent"), summary.get("expected_n")
    if percent is None or not load_n:
        return "-"
    edges = [summary.get(key) for key in ("band_low_n", "band_high_n")]
    low, high = (100.0 * edge / load_n if edge is not None else None for edge in edges)
    return f"{load_bar(percent, low, high)} {number(percent, 0, '%')} of {number(load_n, 0, 'N')}"


def fault_text(event: Numbers) -> str:
    """What, value, limit, what was done, what to do now."""
    what = str(event.get("what") or event.get("name") or event["event"]).replace("_", " ")
    parts = [what]
    if event.get("value") is not None and event.get("limit") is not None:
        unit = event.get("unit", "")
        parts.append(
            f"{event['value']:.4g} {unit}, limit {event['limit']:.4g} {unit}".replace(" ,", ",").strip()
        )
    parts += [str(reason) for reason in event.get("reasons") or ()]
    parts += [str(event[key]) for key in ("detail", "text", "why", "did", "do_now") if event.get(key)]
    return "; ".join(parts)


def result_text(result: Numbers) -> str:
    """One bar's outcome in a line: a strength only where the bar broke."""
    load = number(result.get("peak_n"), 1, "N")
    verdict = result.get("break_class") or result.get("verdict") or result.get("problem") or "no result"
    strength, survived = result.get("strength_mpa"), result.get("stress_survived_mpa")
    if strength is not None:
        found = f"{number(strength, 1, 'MPa')} at {load}"
    else:
        found = f"not broken, bore {number(survived, 1, 'MPa')}" if survived is not None else "no strength"
    return f"{result.get('specimen', '')}: {found}   {verdict}"


def recording_text(reports: Mapping[str, Any], lost_entries: int) -> str:
    """What is wrong with the recording, or nothing. Quiet when all is well."""
    recorder, archivist = reports.get("recorder") or {}, reports.get("archivist") or {}
    found = [str(report["trouble"]) for report in (recorder, archivist) if report.get("trouble")]
    if recorder.get("lag_s", 0.0) > LAG_TOLD_S:
        found.append(f"the recorder is {recorder['lag_s']:.0f} s behind")
    if archivist.get("report") == "recovering":
        found.append("records of an earlier run are being recovered")
    if archivist.get("report") == "copy_failed":
        found.append(f"a copy failed: {archivist.get('why', '')}")
    if lost_entries:
        found.append(f"this view missed {lost_entries} entries; the record has them")
    return "; ".join(found)


def refusal_lines(command: str, missing: Sequence[str]) -> list[str]:
    """A refused command with what is missing, one condition a line."""
    conditions = list(dict.fromkeys(missing))
    if len(conditions) == 1:
        return [f"{command} refused: {conditions[0]}"]
    return [f"{command} refused:", *(f"  - {condition}" for condition in conditions)]


def sealed_lines(report: Numbers) -> list[str]:
    """A sealed record as it is told to the operator: verdict first, then outcome, uncertainty, remarks, place."""
    result = {**(report.get("result") or {}), "specimen": report.get("specimen", "")}
    outcome = result_text(result)
    if result.get("strength_u_k2_mpa") is not None:
        outcome += f"   U(k=2) {number(result['strength_u_k2_mpa'], 1, 'MPa')}"
    remarks = [f"  remark: {remark['text']}" for remark in result.get("remarks") or () if remark.get("text")]
    judged = [f"{result['specimen']}: {result['verdict']} by the rules"] if result.get("verdict_by") else []
    return [*judged, outcome, *remarks, f"  record: {report.get('path', '')}"]
