"""The simulated machine as a process of its own, on a pseudo-terminal and over TCP, keeps the driver contract."""

import os
import signal
import socket
import subprocess
import sys

import pytest

from daq.cards.load import example_path, load_frame
from drivers.contract import World, check_driver
from drivers.driver import WireDriver

pytestmark = [pytest.mark.processes, pytest.mark.slow]


def free_port() -> int:
    with socket.create_server(("127.0.0.1", 0)) as server:
        return int(server.getsockname()[1])


@pytest.fixture(params=["kiln-lane-a.toml", "kiln-lane-b.toml"])
def simulated(request, tmp_path):
    """(process, frame card) of a running simulated machine."""
    text = example_path(request.param).read_text("utf-8")
    text = text.replace('port = "', f'port = "{tmp_path}/').replace(
        "tcp_port = 27150", f"tcp_port = {free_port()}"
    )
    card = tmp_path / request.param
    card.write_text(text, "utf-8")
    process = subprocess.Popen(
        [sys.executable, "-m", "simulator.wire", str(card), "--seed", "7"],
        cwd=tmp_path,
        stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL,
    )
    assert process.stdout is not None
    assert b"link main" in process.stdout.readline()  # says where it is once the port stands
    yield process, load_frame(card)
    process.send_signal(signal.SIGCONT)
    process.terminate()
    process.wait(10.0)
    process.stdout.close()


def test_the_simulated_machine_keeps_the_contract_until_it_dies(simulated):
    process, frame = simulated

    def die() -> None:
        process.kill()
        process.wait(10.0)

    world = World(
        hush=lambda: os.kill(process.pid, signal.SIGSTOP),
        wake=lambda: os.kill(process.pid, signal.SIGCONT),
        lose=die,
        patience_s=10.0,
    )
    skipped = check_driver(lambda: WireDriver(frame), world)
    assert skipped == ["opening sends nothing that moves", "stop may be sent any number of times"]
