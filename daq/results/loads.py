"""Loads: highest raw sample, load at the break, first drop - and which of them the strength is computed
from.
"""

from __future__ import annotations

import math

import numpy as np

from daq.results.loading import Loading
from daq.results.peak import Peak, recover_break, smooth_top
from daq.results.result import Loads

SETTLE_TIME_CONSTANTS = 3.0  # after a partial drop
SETTLE_SAMPLES = 3.0
SETTLE_S = 0.01


def peak_of(loading: Loading, fall_s: float | None) -> Peak | None:
    """The recovered peak; None without a fracture event that names its samples."""
    if loading.onset is None or loading.story.fracture is None:
        return None
    time_s, load_n = loading.samples.time_s[loading.clean], loading.samples.load_n[loading.clean]
    if loading.gradual:
        told_s = loading.story.fracture.time_s
        until_s = math.inf if told_s is None else told_s
        return smooth_top(time_s, load_n, from_s=loading.seated_s, until_s=until_s, sigma_n=loading.sigma_n)
    lag_s = loading.setup.time_constant_s or 0.0
    u_lag_s = 0.0 if fall_s is None or lag_s == 0.0 else abs(fall_s - lag_s) / math.sqrt(3.0)
    peak = None
    for from_s in (_after_drops_s(loading), loading.seated_s, loading.contact_s):
        peak = recover_break(
            time_s,
            load_n,
            loading.onset,
            from_s=min(from_s, loading.onset.last_good_s),
            sigma_n=loading.sigma_n,
            time_constant_s=lag_s,
            u_time_constant_s=u_lag_s,
        )
        if peak is not None and peak.samples > 2:
            break
    return peak


def _after_drops_s(loading: Loading) -> float:
    """No sample before the last partial drop tells the load at the break."""
    lag_s, period_s = loading.setup.time_constant_s or 0.0, loading.samples.period_s
    settle_s = max(SETTLE_S, SETTLE_TIME_CONSTANTS * lag_s, SETTLE_SAMPLES * period_s)
    drops_s = [drop.time_s + settle_s for drop in loading.story.drops if drop.time_s <= loading.end_s]
    return max([loading.seated_s, *drops_s])


def loads_of(loading: Loading, peak: Peak | None, fall_s: float | None) -> Loads:
    """All loads net, the raw one gross as well."""
    samples, story = loading.samples, loading.story
    top = _highest_raw(loading)
    raw_n = None if top is None else float(samples.load_n[top])
    wants_raw = loading.setup.method is not None and loading.setup.method.peak == "raw"
    used_n = raw_n if wants_raw else None if peak is None else peak.load_n
    if not story.broken:
        used_n = None
    drop = next((drop for drop in story.drops if drop.load_n is not None), None)
    return Loads(
        raw_n=raw_n,
        raw_gross_n=None if raw_n is None else raw_n + story.tare_n,
        raw_at_s=None if top is None else float(samples.time_s[top]),
        screened_n=loading.highest_n if samples.count else None,
        recovered=peak,
        used_n=used_n,
        used="" if used_n is None else "highest raw sample" if wants_raw else "recovered",
        first_drop_n=None if drop is None else loading.net_n(drop.load_n),
        first_drop="" if drop is None else drop.name,
        sigma_n=loading.sigma_n,
        fall_time_constant_s=fall_s,
    )


def _highest_raw(loading: Loading) -> int | None:
    """Place of the highest raw sample from the tare to the break: not screened, which is the point of it."""
    until_s = math.inf if loading.onset is None or loading.gradual else loading.onset.first_dropped_s
    from_s = -math.inf if loading.story.tare is None else loading.story.tare.time_s
    time_s = loading.samples.time_s
    inside = np.flatnonzero((time_s >= from_s) & (time_s <= until_s))
    return int(inside[np.argmax(loading.samples.load_n[inside])]) if inside.size else None
