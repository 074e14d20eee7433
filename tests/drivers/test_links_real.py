"""Ports of the operating system: pseudo-terminals and TCP on loopback, opened, filled up, pulled and
refused."""

import errno
import os
import pty
import socket
import termios
import tty

import pytest
from serial.tools.list_ports_common import ListPortInfo
from wire_frames import lines_frame

from daq.errors import DriverOpenError, LinkClosed, LinkLost
from drivers.links import device_of, find_port, latency_timer_ms, open_link, start_bytes, wait_readable
from drivers.trouble import open_trouble

pytestmark = pytest.mark.processes


def serial_card(port: str | None, **link):
    given = {"kind": "serial", "port": port, "host": None, "tcp_port": None, **link}
    return lines_frame({}, [{"name": "force", "column": 1}], link=given).links[0]


def tcp_card(port: int, **link):
    return lines_frame({}, [{"name": "force", "column": 1}], link={"tcp_port": port, **link}).links[0]


@pytest.fixture
def terminal():
    """(machine's end, port name); the machine's end does not echo."""
    master, slave = pty.openpty()
    tty.setraw(slave)
    os.set_blocking(master, False)
    yield master, os.ttyname(slave)
    for descriptor in (master, slave):
        try:
            os.close(descriptor)
        except OSError:
            continue


@pytest.fixture
def server():
    listener = socket.create_server(("127.0.0.1", 0))
    yield listener
    listener.close()


def test_bytes_go_both_ways_and_nothing_there_is_none(terminal):
    master, port = terminal
    link = open_link(serial_card(port))
    assert link.read() is None
    assert not wait_readable(link, 0.0)
    os.write(master, bytes(range(256)))
    assert wait_readable(link, 1.0)
    assert link.read() == bytes(range(256))  # raw: nothing is translated
    assert link.write(b"\x00\r\n\xff") == 4
    assert os.read(master, 100) == b"\x00\r\n\xff"
    assert link.modem() == {}
    link.close()
    link.close()
    for use in (link.read, link.modem, link.fileno, lambda: link.write(b"x")):
        with pytest.raises(LinkClosed):
            use()


def test_what_came_before_opening_is_thrown_away_and_only_the_start_command_is_sent(terminal):
    master, port = terminal
    os.write(master, b"old rows\r\n")
    link = open_link(serial_card(port, start_command="RUN"))
    assert link.read() is None
    assert link.sent_at_open == b"RUN\r\n"
    assert os.read(master, 100) == b"RUN\r\n"
    link.close()


def test_a_port_has_one_owner(terminal):
    _, port = terminal
    first = open_link(serial_card(port))
    with pytest.raises(DriverOpenError, match="in use by another program"):
        open_link(serial_card(port))
    first.close()
    open_link(serial_card(port)).close()


def test_a_full_output_gives_a_short_count_and_never_waits(terminal):
    _, port = terminal
    link = open_link(serial_card(port))
    taken = [link.write(b"x" * 4096) for _ in range(200)]
    assert taken[0] > 0
    assert taken[-1] == 0
    link.close()


def test_an_empty_read_means_the_other_end_has_gone(terminal):
    """VMIN 1: a silent line is None, a pulled one is LinkLost, and stays so for reading and writing."""
    master, port = terminal
    link = open_link(serial_card(port))
    assert termios.tcgetattr(link.fileno())[6][termios.VMIN] in (1, b"\x01")
    os.close(master)
    for _ in range(2):
        with pytest.raises(LinkLost):
            link.read()
    with pytest.raises(LinkLost):
        link.write(b"HALT\r\n")
    link.close()


@pytest.mark.parametrize(
    ("port", "words"),
    [
        ("/dev/there-is-no-such-port", "no such port"),
        ("/dev/null", "not a serial port"),
        ("/", "a folder"),
        (__file__, "not a serial port"),
    ],
)
def test_a_port_that_cannot_be_opened_is_one_clear_line(port, words):
    with pytest.raises(DriverOpenError, match=words) as caught:
        open_link(serial_card(port))
    assert "\n" not in str(caught.value)
    assert port in str(caught.value)


@pytest.mark.parametrize(
    ("number", "words"),
    [
        (errno.EACCES, "dialout"),
        (errno.EBUSY, "another program"),
        (errno.EAGAIN, "another program"),
        (errno.EIO, "cable"),
        (errno.ENOENT, "no such port"),
        (None, "strange"),
    ],
)
def test_what_to_do_is_said_for_every_trouble(number, words):
    assert words in open_trouble(number, "something strange")


@pytest.mark.parametrize(
    ("number", "words"),
    [
        (errno.ECONNREFUSED, "refused"),
        (errno.EHOSTUNREACH, "no way"),
        (errno.ETIMEDOUT, "3 s"),
        (None, "3 s"),
        (7, "could not connect"),
    ],
)
def test_what_to_do_is_said_for_every_network_trouble(number, words):
    assert words in open_trouble(number, "timed out" if number is None else "x", tcp=True)


def test_tcp_goes_both_ways_at_once_and_a_closed_peer_is_a_lost_link(server):
    link = open_link(tcp_card(server.getsockname()[1], start_command="RUN"))
    peer, _ = server.accept()
    assert peer.recv(100) == b"RUN\r\n"
    own = socket.socket(fileno=os.dup(link.fileno()))
    assert own.getsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY)
    assert own.getsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE)
    own.close()
    assert link.read() is None
    peer.sendall(b"row")
    assert wait_readable(link, 1.0) and link.read() == b"row"
    peer.close()
    assert wait_readable(link, 1.0)
    with pytest.raises(LinkLost, match="hung up"):
        link.read()
    link.close()


def test_a_refused_connection_is_one_clear_line(server):
    port = server.getsockname()[1]
    server.close()
    with pytest.raises(DriverOpenError, match=f"127.0.0.1:{port}: connection refused"):
        open_link(tcp_card(port))


def usb(device: str, serial_number: str | None) -> ListPortInfo:
    port = ListPortInfo(device)
    port.serial_number = serial_number
    return port


def test_a_link_is_found_by_the_serial_number_of_its_adapter_wherever_it_is_plugged():
    card = serial_card(None, device_serial="A7")
    assert device_of(card, [usb("/dev/ttyUSB0", "B1"), usb("/dev/ttyUSB1", "A7")]) == "/dev/ttyUSB1"
    assert device_of(card, [usb("/dev/ttyUSB0", "A7"), usb("/dev/ttyUSB1", "B1")]) == "/dev/ttyUSB0"
    with pytest.raises(DriverOpenError, match="neither port nor device_serial"):
        device_of(serial_card(None), [])


def test_a_serial_number_twice_or_never_is_refused():
    with pytest.raises(DriverOpenError, match="2 ports have this serial number"):
        find_port("A7", [usb("/dev/ttyUSB0", "A7"), usb("/dev/ttyUSB1", "A7")])
    with pytest.raises(DriverOpenError, match=r"present: /dev/ttyUSB0 = B1\)"):
        find_port("A7", [usb("/dev/ttyUSB0", "B1"), usb("/dev/ttyS0", None)])
    with pytest.raises(DriverOpenError, match="present: none"):
        find_port("A7", [])


def test_the_start_command_ends_as_the_lines_of_its_link():
    assert start_bytes(tcp_card(1)) == b""
    assert start_bytes(tcp_card(1, start_command="RUN", lines={"line_end": "\r"})) == b"RUN\r"


def test_a_port_without_a_latency_timer_has_none(terminal):
    assert latency_timer_ms(terminal[1]) is None
