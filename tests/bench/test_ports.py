"""Links of the bench process that are lost, come back, or take nothing: real TCP on loopback, one process."""

from __future__ import annotations

import json
import select
import socket
from collections.abc import Iterator
from contextlib import closing, contextmanager

import pytest

from daq.cards.frame import FrameCard
from daq.stream.block import GAP_UNKNOWN
from tests.bench.process import TurnedBench, turned

pytestmark = pytest.mark.processes
CELL = {
    "serial": "T-1",
    "capacity_n": 1e3,
    "verified_min_n": 10.0,
    "verified_max_n": 1e3,
    "position": "supports",
}
MOTION = {
    "link": "main",
    "speed_mm_min_min": 0.1,
    "speed_mm_min_max": 50.0,
    "start": {"send": "GO {speed_mm_min:+.3f}"},
    "stop": {"send": "HALT"},
    "status": {"send": "?", "reply": "ST=", "letters_ignored": "R", "timeout_s": 5.0},
}


def card(*ports: int) -> FrameCard:
    """One line of text a sample; the first link carries force and motion, a second one a gauge."""
    links = [
        {
            "name": name,
            "kind": "tcp",
            "host": "127.0.0.1",
            "tcp_port": port,
            "rate_hz": 10.0,
            "silence_s": 10.0,
        }
        for name, port in zip(("main", "gauge"), ports, strict=False)
    ]
    channels = [
        {"name": "force", "link": "main", "role": "force", "unit": "N", "column": 1},
        {"name": "strain", "link": "gauge", "role": "strain", "unit": "1", "column": 1},
    ]
    fixture = {"name": "three-40", "geometry": "3-point", "support_span_mm": 40.0, "rating_n": 2e3}
    whole = {
        "card": "frame",
        "name": "test-frame",
        "simulated": True,
        "cell": CELL,
        "links": [{**link, "dialect": "lines", "lines": {}} for link in links],
        "channels": channels[: len(ports)],
        "fixtures": [fixture],
        "motion": MOTION,
    }
    return FrameCard.model_validate_json(json.dumps(whole))


class Device:
    """The other end of one link."""

    def __init__(self) -> None:
        self.listener = socket.create_server(("127.0.0.1", 0))
        self.port: int = self.listener.getsockname()[1]
        self.line: socket.socket | None = None

    def accept(self) -> None:
        self.line, _ = self.listener.accept()

    def say(self, text: str) -> None:
        assert self.line is not None
        self.line.sendall(text.encode())

    def hang_up(self) -> None:
        assert self.line is not None
        self.line.close()
        self.line = None

    def close(self) -> None:
        for each in (self.line, self.listener):
            if each is not None:
                each.close()


@contextmanager
def benches(devices: int) -> Iterator[tuple[TurnedBench, list[Device]]]:
    made = [Device() for _ in range(devices)]
    try:
        with turned(card(*(device.port for device in made))) as bench:
            for device in made:
                device.accept()
            yield bench, made
    finally:
        for device in made:
            device.close()


def lose(bench: TurnedBench, device: Device, number: int = 0) -> None:
    device.hang_up()
    bench.until(lambda: bench.ports[number].lost)
    bench.ports[number].reopen_ns = 0  # the second between two tries is over


def back(bench: TurnedBench, device: Device, number: int = 0) -> None:
    bench.until(lambda: not bench.ports[number].lost)
    device.accept()


def test_a_connection_that_is_not_answered_holds_nobody_up_and_is_given_up() -> None:
    """The other end's queue is full: a blocking connect would hold silence, keep-alive and STOP for three seconds."""
    with benches(1) as (bench, (device,)):
        lose(bench, device)
        device.listener.close()
        with closing(socket.create_server(("127.0.0.1", device.port), backlog=0)) as deaf:
            crowd = [
                socket.socket(socket.AF_INET, socket.SOCK_STREAM | socket.SOCK_NONBLOCK) for _ in range(3)
            ]
            for one in crowd:
                one.connect_ex(("127.0.0.1", device.port))
            port = bench.ports[0]
            bench.until(lambda: port.connecting is not None)
            for _ in range(3):
                bench.turn()  # turns go on; a blocked one would end with the attempt decided
                assert port.lost and port.connecting is not None
            port.give_up_ns = 0
            bench.until(lambda: port.connecting is None)
            assert port.lost
            for one in crowd:
                one.close()
            assert select.select([deaf], [], [], 0)[0]


def test_a_link_that_comes_back_lists_a_gap_of_unknown_size_and_tells_its_opening() -> None:
    with benches(1) as (bench, (device,)):
        device.say("1.0\r\n1.5\r\n2.0\r\n")
        bench.until(lambda: bool(bench.blocks))
        lose(bench, device)
        back(bench, device)
        device.say("7.0\r\n7.5\r\n8.0\r\n")
        first_time = len(bench.blocks)
        bench.until(lambda: len(bench.blocks) > first_time)
        assert [block.gap_samples for block in bench.blocks[:first_time]] == [0] * first_time
        assert bench.blocks[first_time].gap_samples == GAP_UNKNOWN
        assert [(gap["source"], gap["missing"]) for gap in bench.named("gap")] == [("main", None)]
        assert [event["again"] for event in bench.named("link_open")] == [False, True]
        device.say("8.5\r\n")
        bench.until(lambda: bench.blocks[-1].counts[-1, 0] == 8.5)
        assert bench.blocks[-1].gap_samples == 0


def test_two_lost_links_block_until_both_are_back() -> None:
    with benches(2) as (bench, (device, gauge)):
        lose(bench, device, 0)
        lose(bench, gauge, 1)
        bench.ports[1].reopen_ns = 1 << 62
        back(bench, device, 0)
        assert [line for line in bench.missing if "link" in line and "gauge" in line], bench.missing
        assert not [line for line in bench.missing if "main" in line]
        bench.ports[1].reopen_ns = 0
        back(bench, gauge, 1)
        assert not [line for line in bench.missing if "link to the machine is lost" in line]


def test_what_a_lost_link_never_took_is_an_event_and_no_sent_bytes() -> None:
    with benches(1) as (bench, (device,)):
        bench.until(lambda: b"?\r\n" in bench.sent)
        lose(bench, device)
        bench.ports[0].reopen_ns = 1 << 62
        sent = list(bench.sent)
        bench.until(lambda: any(event["data"] == "?\r\n" for event in bench.named("not_sent")))
        bench.until(lambda: bench.ports[0].unsent.writes >= 3)
        bench.process._write(bench.process._core.stop("test", 1 << 40))
        bench.until(lambda: any(event["data"] == "HALT\r\n" for event in bench.named("not_sent")))
        assert bench.sent == sent
        assert len(bench.named("not_sent")) == len({event["data"] for event in bench.named("not_sent")})
        bench.ports[0].reopen_ns = 0
        back(bench, device)
        bench.until(lambda: bench.sent[-1] == b"HALT\r\n")
        (count,) = [event for event in bench.named("not_sent") if event["data"] is None]
        assert count["writes"] >= 4


def test_what_a_full_port_took_is_what_is_recorded() -> None:
    """The device reads nothing for a while: its bytes and the recorded ones are the same, in the same order."""
    with benches(1) as (bench, (device,)):
        assert device.line is not None
        filler = 0
        while taken := bench.ports[0].link.write(b"#" * 65536):
            filler += taken
        bench.until(lambda: bool(bench.ports[0].pending))
        bench.process._write(bench.process._core.stop("test", 1 << 40))
        bench.until(lambda: bool(bench.named("not_sent")))
        assert not bench.sent and bench.named("not_sent")[0]["why"] == "a STOP went first"
        got = bytearray()
        device.line.setblocking(False)

        def read() -> bool:
            if select.select([device.line], [], [], 0)[0]:
                assert device.line is not None
                got.extend(device.line.recv(1 << 20))
            return got.count(b"HALT\r\n") >= 1 and got.endswith(b"\n")

        bench.until(read)
        bench.until(lambda: b"".join(bench.sent) == bytes(got[filler:]))
