"""Events of the bench process itself, beside those of the watch (daq.watch.catalogue). Names and meanings; no logic."""

from __future__ import annotations

from collections.abc import Mapping

BENCH_EVENTS: Mapping[str, str] = {
    "bench_started": "The bench process is up: fifo, memory_locked (what was granted), machine_watchdog.",
    "link_open": "A port is open, at the start or again after a loss; its decoder begins anew: link, again.",
    "bench_memory": "What decoders, clock and watch remember directly before a run is opened: origin_ns, memory "
    "(daq.bench.memory; None and why where it cannot be kept). Recomputation begins from it.",
    "ticks": "Moments at which time alone moved an open run on, while a link was silent: after_origin_ns.",
    "rejected": "Bytes or rows that were received and not recorded: link, discarded_bytes, rows by reason.",
    "accounting": "The account of a run, directly before its end: per link received = recorded + rejected.",
    "not_sent": "Command bytes that never left: link, why, writes, bytes, data (the first 64 as text; None: a count).",
    "stop_handed_over": "The output was full: the stopper was told to write the STOP in the bench's stead: link.",
    "ring_loss": "Entries that found no room in the ring: first_sequence, last_sequence, entries, bytes.",
}
