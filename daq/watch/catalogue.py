"""Every event the watch can emit, with its meaning. The log, the record and the feed know no other names.

Every event also carries "event", "time_s" and "severity". Forces are gross unless the key ends in _net_n.
"""

from __future__ import annotations

from collections.abc import Mapping

EVENTS: Mapping[str, str] = {
    # the run
    "run_opened": "One loading of one bar was opened; holds every card, so that a record needs nothing else.",
    "tared": "Zero taken at rest: tare_n, sigma_n, drift_n_min, u_n, samples, rate_hz; overridden: reason or empty.",
    "tare_refused": "Zero not taken: reasons, and the measured gross_n.",
    "zero_moved": "The zero differs from the commissioned or the previous one by shift_n.",
    "envelope": "What the present noise, rate and lag let the fracture watch see: detects, reasons, budget.",
    "limits": "The force limits as frozen for this run, gross N.",
    "ready": "Everything needed for the start of this run is there.",
    "started": "The deliberate start was given.",
    "run_closed": "End of the loading: run_id, verdict, reason, interrupted.",
    "note": "A remark of the operator, by one key.",
    "seat_taken": "A named person has taken the operator's seat: operator, before (whose it was; empty: it was free).",
    "second_look": "The stiffness on the way up is off what was planned: ratio.",
    # motion
    "approach_touch": "The force rose above the touch level: force_n, position_mm.",
    "preload_high": "The load when standing in contact is above a tenth of the expected break load.",
    "seated": "The stiffness has become steady: force_n, toe_n, toe_offset_mm (None without a position channel).",
    "uneven_seating": "The toe is longer than a quarter of the expected load, or the stiffness still rises late.",
    "speed_clamped": "A lower speed was commanded than asked: asked_mm_min, given_mm_min.",
    "jogged": "The operator moved the crosshead towards the specimen: distance_mm, speed_mm_min.",
    "returned": "The operator, or the back-off after a break, moved the crosshead away: distance_mm, speed_mm_min.",
    "arrived": "A jog or a return ended where it should.",
    "speed_corrected": "The force loop closed by midspan set a new speed.",
    "rate_out_of_band": "The loading rate left the card's tolerance for more than a second.",
    "rate_interrupted": "The loading rate changed by a step of more than a quarter: duration_s.",
    # states, stops, limits
    "state": "The state word changed: from, to, reason.",
    "limit": "A limit (its row in daq.watch.limits.ROWS): row, value, limit, unit, what, did, do_now, first (cause).",
    "limit_outlier": "One single sample outside a limit: counted, not obeyed.",
    "limit_tightened": "A limit was lowered: key, value, before.",
    "stop_sent": "A stop was commanded: reason, attempt.",
    "stopped": "The crosshead stands: run_on_mm, after_s, verified, seen_by (position, force, the machine's own word); "
    "verified False: it has not been seen to stand, why.",
    "stop_failed": "The machine goes on moving after the stop: press the emergency stop.",
    "reset": "A latched state was cleared by a person: who, looked.",
    "proven": "Polarity and stop drill were recorded as proven: polarity, stop_drill, who.",
    "polarity_locked": "A wrong sign was seen: the proof is void, nothing moves until the polarity is proven again.",
    "cell_locked": "The cell was overloaded: no bar and no way towards one until its zero and a weight are checked.",
    "cell_zero_seen": "The zero of the bare cell was looked at after an overload: who, shift_n.",
    "cell_checked": "A known weight was right after an overload, the cell is free again: who, weight_n, found_n.",
    "fault": "A fault told by a driver or by another process: name, detail, what, did, do_now, first.",
    "input": "A status input changed: name, active (None: unknown).",
    # the signal
    "signal_lost": "The force or position signal cannot be believed: why, channel, last_n.",
    "signal_back": "The signal is back after a loss at rest.",
    "channel_lost": "A channel that is not needed for control went away; the run goes on without it.",
    "displacement_lost": "The position signal is lost; the run goes on by force alone, as its method allows.",
    "gap": "Samples are missing: source, missing (None: unknown), span_s.",
    "sample_rate_off": "The measured sample rate is not the declared one: declared_hz, measured_hz.",
    "hum": "A mains line is too strong in the force: true_hz, seen_hz (its alias at this rate), amplitude_n.",
    "noise_high": "The noise is above three times the quiet record: sigma_n, quiet_n.",
    # what the bar did
    "glitch": "Samples off for a moment and back again; left out of all screened numbers: off_n, samples.",
    "slip": "A partial drop with the same stiffness before and after: load_n, drop_n, ratio.",
    "pop_in": "A partial drop with a lower stiffness after (an arrested crack): load_n, drop_n, ratio.",
    "partial_drop": "A partial drop whose kind could not be told: load_n, drop_n, why.",
    "rebaseline": "The force falls slowly, without a step: the forecast was begun anew.",
    "events_many": "More slips, pop-ins or glitches than a good loading has: kind, count.",
    "no_break": "The load is above what 999 of 1000 bars bear, without a break.",
    "fracture": "The bar broke: verdict, onset_s, last_good_s, first_dropped_s, last_good_index, peak_raw_n, "
    "forecast_n, forecast_slope_n_s, sigma_n, fall_s, delay_s, by.",
    "residual": "What is still on the specimen after the break: force_n, force_net_n, unloaded.",
    "second_break": "The load rose again after the break and fell again by more than a fifth of the first peak.",
    "after_zero": "Zero after the break against the tare: shift_n, u_n, flagged.",
    "rests_on_fixture": "Something of about force_n rests on the fixture.",
    "operator_absent": "A bar has stood in contact for more than five minutes.",
}
