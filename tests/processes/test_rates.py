"""Real wires at the ends of the range: 10 S/s of text, 50 kS/s of packets, over a pty and over TCP. No row is lost."""

from __future__ import annotations

import json
import subprocess
import sys
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from daq.cards.load import example_path
from daq.record.read import read_run
from daq.record.verify import verify
from tests.processes.rig import Rig, free_port, runtime_folder, stand

FRAME = """
card = "frame"
name = "{name}"
title = "Fed with noise, monitor only"
simulated = true

[cell]
serial = "KL-CELL-0999"
capacity_n = 1000.0
verified_min_n = 10.0
verified_max_n = 1000.0
position = "crosshead"
noise_quiet_n = 0.5
zero_balance_n = 1.5

[[links]]
name = "main"
{port}
rate_hz = {rate_hz}
silence_s = 5.0                       # a busy computer may hold the feeder back; nothing moves here
dialect = "{dialect}"

[links.{dialect}]
{table}

[[channels]]
name = "force"
link = "main"
role = "force"
unit = "N"
{place}
scale = 0.04
counts_min = -32768.0
counts_max = 32767.0

[[fixtures]]
name = "quarter-40-20"
geometry = "4-point"
support_span_mm = 40.0
load_span_mm = 20.0
rating_n = 2000.0
"""
LINES = {
    "dialect": "lines",
    "rate_hz": 10.0,
    "place": "column = 2",
    "table": 'separator = ","\nprefix = "D"\ncounter_column = 1\ncounter_modulus = 256\nchecksum = "sum8"',
}
# 2 + 2 + 2 + 1 = 7 bytes: 50 000 rows/s need 3.5 Mbaud, which a pty can be set to
PACKETS = {
    "dialect": "packets",
    "rate_hz": 50_000.0,
    "place": 'field = "force"',
    "table": 'sync = "a55a"\nendian = "big"\nfields = [{ name = "counter", number = "uint16" }, '
    '{ name = "force", number = "int16" }]\ncounter_field = "counter"\nchecksum = "crc8"',
}
PTY = 'kind = "serial"\nport = "fed.tty"\nspeed_baud = 4000000'


@pytest.mark.timeout(300)
@pytest.mark.parametrize("port", ["pty", "tcp"])
@pytest.mark.parametrize("rows", [LINES, PACKETS], ids=["10 lines a second", "50 000 packets a second"])
def test_no_row_is_lost_at_any_rate(rows: dict[str, Any], port: str, tmp_path: Path) -> None:
    where = PTY if port == "pty" else f'kind = "tcp"\nhost = "127.0.0.1"\ntcp_port = {free_port()}'
    text = FRAME.format(name=f"fed-{port}", port=where, **rows)
    with fed_rig(text, tmp_path) as (rig, fed):
        rig.open_series(series_in(rig.folder))
        rig.wait("the first force", lambda: any(u.body.get("gross_n") is not None for u in rig.updates), 30.0)
        run_id = str(rig.session.mount()["run_id"])
        rig.wait("ready", lambda: rig.session.state == "ready", 90.0)
        rig.pump(2.0)
        rig.client.do("close", reason="seen enough")
        report = rig.session.finish(run_id, timeout_s=60.0)
        written = fed()
        lost = rig.client.lost_updates
    record = Path(report["path"])
    checked = verify(record)
    assert checked.ok and checked.accounted, checked.problems
    assert checked.gaps == 0
    run = read_run(record)
    (account,) = next(event for event in run.events if event["event"] == "accounting")["links"]
    assert account["rejected"] == {} and account["received"] == account["recorded"] > 0
    index, time_s = run.channels["force"].index, run.channels["force"].time_s
    assert np.array_equal(index, np.arange(index[0], index[0] + len(index)))
    assert index[-1] < written
    assert (len(index) - 1) / (time_s[-1] - time_s[0]) > 0.2 * rows[
        "rate_hz"
    ]  # a busy computer holds it back
    assert lost == 0


def series_in(folder: Path) -> Path:
    """The demonstration's series for a frame without a position: no modulus."""
    for name in ("demo-series.toml", "demo-series.csv", "alumina-demo.toml"):
        text = example_path(name).read_text("utf-8")
        (folder / name).write_text(text.replace('modulus = "crosshead"', 'modulus = "no"'), encoding="utf-8")
    return folder / "demo-series.toml"


@contextmanager
def fed_rig(card_text: str, data: Path) -> Iterator[tuple[Rig, Any]]:
    """The daemon at the end of a feeder's wire; fed() ends the feeder and tells how many rows it wrote."""
    with ExitStack() as stack:
        folder = runtime_folder(stack)
        card = folder / "fed.toml"
        card.write_text(card_text, encoding="utf-8")
        command = [sys.executable, "-m", "tests.processes.feeder", str(card), str(folder)]
        feeder = stack.enter_context(subprocess.Popen(command, stdout=subprocess.PIPE))
        stack.callback(feeder.kill)
        assert feeder.stdout is not None
        assert json.loads(feeder.stdout.readline())["ready"]

        def fed() -> int:
            feeder.terminate()
            return int(json.loads(feeder.stdout.readline())["rows"])

        yield stand(stack, card, folder, feeder, data=data), fed
