"""Links: bytes to and from one port, serial or TCP, and nothing else. Never waits once open, never spins.

Opening moves nothing: lines are set before the port opens, the input is flushed, and only the card's start
command is sent. Whatever the world does to an open port is LinkLost; whatever keeps it from opening is
DriverOpenError with one clear line.
"""

from __future__ import annotations

import errno
import fcntl
import os
import select
import socket
import struct
import termios
from abc import ABC, abstractmethod
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Protocol

import serial
from serial.tools import list_ports
from serial.tools.list_ports_common import ListPortInfo

from daq.cards.frame import Link as LinkCard
from daq.errors import DriverOpenError, LinkClosed, LinkLost
from drivers.trouble import open_trouble

READ_BYTES_MAX = 65_536
CONNECT_S = 3.0
FLUSH_READS = 64
"""Reads that empty a port at opening; 4 MiB, then data are arriving faster than any declared rate."""

MODEM_BITS = {
    "cts": termios.TIOCM_CTS,
    "dsr": termios.TIOCM_DSR,
    "dcd": termios.TIOCM_CD,
    "ri": termios.TIOCM_RI,
}
PARITY = {"none": serial.PARITY_NONE, "even": serial.PARITY_EVEN, "odd": serial.PARITY_ODD}


class Link(Protocol):
    """An open port. `sent_at_open`: the bytes written while opening, for the record."""

    name: str
    device: str
    card: LinkCard
    sent_at_open: bytes

    def fileno(self) -> int: ...

    def read(self, max_bytes: int = READ_BYTES_MAX) -> bytes | None:
        """What is there; None = nothing. Raises LinkLost, or LinkClosed after close."""
        ...

    def write(self, data: bytes) -> int:
        """How many bytes the output took now, possibly 0. Raises LinkLost, or LinkClosed after close."""
        ...

    def modem(self) -> Mapping[str, bool]:
        """Levels of the modem lines that can be read; empty where there are none."""
        ...

    def close(self) -> None:
        """Twice is fine."""
        ...


class _DescriptorLink(ABC):
    """Reading and writing a non-blocking descriptor; what serial ports and sockets share."""

    def __init__(self, card: LinkCard, device: str, descriptor: int) -> None:
        self.name = card.name
        self.device = device
        self.card = card
        self.sent_at_open = b""
        self._descriptor = descriptor

    def fileno(self) -> int:
        self._must_be_open()
        return self._descriptor

    def read(self, max_bytes: int = READ_BYTES_MAX) -> bytes | None:
        self._must_be_open()
        try:
            data = os.read(self._descriptor, max_bytes)
        except (BlockingIOError, InterruptedError):
            return None
        except OSError as error:
            raise self._lost(str(error)) from error
        if not data:
            raise self._lost("the other end hung up")
        return data

    def write(self, data: bytes) -> int:
        self._must_be_open()
        if not data:
            return 0
        try:
            return os.write(self._descriptor, data)
        except (BlockingIOError, InterruptedError):
            return 0
        except OSError as error:
            raise self._lost(str(error)) from error

    def modem(self) -> Mapping[str, bool]:
        self._must_be_open()
        return {}

    def close(self) -> None:
        if self._descriptor >= 0:
            self._descriptor = -1
            self._release()

    @abstractmethod
    def _release(self) -> None: ...

    def _must_be_open(self) -> None:
        if self._descriptor < 0:
            raise LinkClosed("used after it was closed", driver=self.name, device=self.device)

    def _lost(self, why: str) -> LinkLost:
        return LinkLost(f"link lost: {why}", driver=self.name, device=self.device)


class SerialLink(_DescriptorLink):
    """A serial port or pseudo-terminal. pyserial opens and configures; the descriptor is then ours."""

    def __init__(self, card: LinkCard, device: str) -> None:
        self._port = _configured(card, device)
        try:
            self._port.open()
            descriptor = self._port.fileno()
            _take_over(descriptor)
        except (OSError, termios.error) as error:  # SerialException is an OSError
            self._port.close()
            number = error.args[0] if isinstance(error, termios.error) else error.errno
            why = open_trouble(number if isinstance(number, int) else None, str(error))
            raise DriverOpenError(why, driver=card.name, device=device) from error
        super().__init__(card, device, descriptor)
        self.low_latency = _low_latency(self._port)

    def modem(self) -> Mapping[str, bool]:
        self._must_be_open()
        try:
            word = fcntl.ioctl(self._descriptor, termios.TIOCMGET, b"\0\0\0\0")
        except OSError:
            return {}
        (bits,) = struct.unpack("I", word)
        return {line: bool(bits & bit) for line, bit in MODEM_BITS.items()}

    def _release(self) -> None:
        self._port.close()


class TcpLink(_DescriptorLink):
    """A TCP connection; small packets leave at once; a dead peer is noticed within seconds."""

    def __init__(self, card: LinkCard, connected: socket.socket) -> None:
        self._socket = connected
        self.family, self.address = connected.family, connected.getpeername()
        self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self._socket.setsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE, 1)
        self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_KEEPIDLE, 1)
        self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_KEEPINTVL, 1)
        self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_KEEPCNT, 3)
        self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_USER_TIMEOUT, int(CONNECT_S * 1000))
        self._socket.setblocking(False)
        super().__init__(card, tcp_device(card), self._socket.fileno())

    def _release(self) -> None:
        self._socket.close()


def tcp_device(card: LinkCard) -> str:
    return f"{card.host}:{card.tcp_port}"


def connect(card: LinkCard) -> TcpLink:
    """A TCP connection, made within CONNECT_S; waits for it."""
    try:
        return TcpLink(card, socket.create_connection((card.host, card.tcp_port), timeout=CONNECT_S))
    except OSError as error:
        raise _not_connected(card, error) from error


def _not_connected(card: LinkCard, error: OSError) -> DriverOpenError:
    why = open_trouble(error.errno, str(error), tcp=True)
    return DriverOpenError(why, driver=card.name, device=tcp_device(card))


class Connecting:
    """A TCP connection that is being made again, to the address of before: no name is looked up, nothing waits."""

    def __init__(self, before: TcpLink) -> None:
        """Raises DriverOpenError where it is refused at once."""
        self._card = before.card
        self._socket = socket.socket(before.family, socket.SOCK_STREAM | socket.SOCK_NONBLOCK)
        number = self._socket.connect_ex(before.address)
        if number not in (0, errno.EINPROGRESS):
            self.close()
            raise _not_connected(self._card, OSError(number, os.strerror(number)))

    def link(self) -> Link | None:
        """The open link; None while the other end has not answered. Raises DriverOpenError where it will not."""
        poll = select.poll()
        poll.register(self._socket, select.POLLOUT)
        if not poll.poll(0):
            return None
        number = self._socket.getsockopt(socket.SOL_SOCKET, socket.SO_ERROR)
        try:
            if number:
                raise OSError(number, os.strerror(number))
            return _begun(TcpLink(self._card, self._socket))
        except OSError as error:
            self.close()
            raise _not_connected(self._card, error) from error

    def close(self) -> None:
        self._socket.close()


def open_link(card: LinkCard) -> Link:
    """Open one port of a frame card, empty its input and send its start command."""
    return _begun(connect(card) if card.kind == "tcp" else SerialLink(card, device_of(card)))


def _begun(link: TcpLink | SerialLink) -> Link:
    """Input emptied, start command sent."""
    card = link.card
    try:
        for _ in range(FLUSH_READS):
            if link.read() is None:
                break
        link.sent_at_open = start_bytes(card)
        _write_all(link, link.sent_at_open)
    except LinkLost as error:
        link.close()
        why = "it opened and was gone at once: plug it in again, look at cable and power"
        raise DriverOpenError(why, driver=card.name, device=link.device) from error
    return link


def start_bytes(card: LinkCard) -> bytes:
    """The start command with the line end of the link's dialect; empty where the card has none."""
    if not card.start_command:
        return b""
    end = "\r\n"
    if card.lines is not None:
        end = card.lines.line_end
    elif card.packets is not None:
        end = card.packets.reply_line_end
    return (card.start_command + end).encode("ascii", "replace")


def device_of(card: LinkCard, ports: Sequence[ListPortInfo] | None = None) -> str:
    """The device path of a serial link: by the adapter's serial number where the card gives one."""
    if card.device_serial is not None:
        return find_port(card.device_serial, ports)
    if card.port is None:
        why = "the card gives neither port nor device_serial: add one of them"
        raise DriverOpenError(why, driver=card.name, device="?")
    return card.port


def find_port(device_serial: str, ports: Sequence[ListPortInfo] | None = None) -> str:
    """The one port whose USB adapter has this serial number. Twice or never is an error, never a guess."""
    present = list(list_ports.comports()) if ports is None else list(ports)
    found = [port.device for port in present if port.serial_number == device_serial]
    if len(found) == 1:
        return str(found[0])
    if found:
        why = f"{len(found)} ports have this serial number ({', '.join(sorted(found))}): unplug all but one"
    else:
        known = sorted(f"{port.device} = {port.serial_number}" for port in present if port.serial_number)
        seen = ", ".join(known) or "none"
        why = f"no port has this serial number (present: {seen}): plug it in, or correct device_serial"
    raise DriverOpenError(why, driver="serial", device=device_serial)


def wait_readable(link: Link, timeout_s: float) -> bool:
    """Wait until there is something to read (or the link broke), at most so long."""
    poll = select.poll()
    poll.register(link.fileno(), select.POLLIN)
    return bool(poll.poll(max(timeout_s, 0.0) * 1000.0))


def latency_timer_ms(device: str) -> int | None:
    """The latency timer of a USB adapter (16 ms is usual and far too long); None where there is none to
    read."""
    setting = Path("/sys/bus/usb-serial/devices") / Path(os.path.realpath(device)).name / "latency_timer"
    try:
        return int(setting.read_text("ascii"))
    except (OSError, ValueError):
        return None


def _configured(card: LinkCard, device: str) -> serial.Serial:
    port = serial.Serial()
    port.port = device
    port.baudrate = card.speed_baud
    port.bytesize = card.data_bits
    port.parity = PARITY[card.parity]
    port.stopbits = card.stop_bits
    port.exclusive = True
    port.timeout = 0
    port.dtr = card.dtr_at_open
    port.rts = card.rts_at_open
    return port


def _take_over(descriptor: int) -> None:
    """No second opener, no blocking, and an empty read only when the other end has gone (VMIN 1, not 0)."""
    fcntl.ioctl(descriptor, termios.TIOCEXCL)
    os.set_blocking(descriptor, False)
    settings = termios.tcgetattr(descriptor)
    settings[6][termios.VMIN] = 1
    settings[6][termios.VTIME] = 0
    termios.tcsetattr(descriptor, termios.TCSANOW, settings)


def _low_latency(port: serial.Serial) -> bool:
    """Ask the driver to hand on every byte at once; only some have such a mode."""
    try:
        port.set_low_latency_mode(True)
    except (OSError, ValueError, NotImplementedError):
        return False
    return True


def _write_all(link: Link, data: bytes) -> None:
    """The few bytes of a start command into an empty output; a port that takes none of them is as good as
    gone."""
    taken = link.write(data)
    if taken < len(data):
        raise LinkLost("the output takes nothing", driver=link.name, device=link.device)
