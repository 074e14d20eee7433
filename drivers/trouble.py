"""Why a port did not open, in one line that says what to do. Pure: error number in, words out."""

from __future__ import annotations

import errno

BUSY = (errno.EBUSY, errno.EAGAIN, errno.EWOULDBLOCK)


def open_trouble(number: int | None, detail: str, *, tcp: bool = False) -> str:
    """number: errno where the system gave one; detail: its own text, kept for what is not foreseen."""
    if tcp:
        return _tcp_trouble(number, detail)
    if number == errno.ENOENT:
        return "there is no such port: plug it in, or correct `port` in the frame card"
    if number in (errno.EACCES, errno.EPERM):
        return (
            "no permission: add yourself to the group that owns it "
            "(on Debian: sudo usermod -a -G dialout $USER, then log in again)"
        )
    if number in BUSY:
        return "in use by another program: close it (a second midspan, a terminal program, a modem service)"
    if number in (errno.ENOTTY, errno.EINVAL) or "Could not configure port" in detail:
        return "this is not a serial port: correct `port` in the frame card"
    if number in (errno.ENXIO, errno.EIO, errno.ENODEV):
        return "the port is there but no device answers behind it: plug it in again, look at cable and power"
    if number == errno.EISDIR:
        return "this is a folder, not a serial port: correct `port` in the frame card"
    return f"could not be opened: {detail}"


def _tcp_trouble(number: int | None, detail: str) -> str:
    if number == errno.ECONNREFUSED:
        return "connection refused: is the device on, is tcp_port right, is another client connected?"
    if number in (errno.EHOSTUNREACH, errno.ENETUNREACH):
        return "no way to this host: look at the cable and at `host` in the frame card"
    if number == errno.ETIMEDOUT or "timed out" in detail:
        return "no answer within 3 s: is the device on, is `host` right?"
    return f"could not connect: {detail}"
