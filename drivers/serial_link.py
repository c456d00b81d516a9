"""serial:///dev/ttyX?baud=N: a serial port, opened and configured by pyserial.

pyserial's own read loop has open faults, so its file descriptor is read and written directly.
"""

import contextlib
import dataclasses
import errno
import fcntl
import struct
import termios
import time
from typing import NamedTuple
from urllib.parse import parse_qs, urlsplit

import serial

from drivers.byte_link import ByteLink, Clock
from drivers.errors import LinkBusy, LinkError
from drivers.link import LinkStatistics

DEFAULT_BAUD = 115200
MAX_BAUD = 12_000_000

_TIOCGICOUNT = 0x545D
"""Linux's request for a UART's own counters; the standard library has no name for it."""

_ICOUNT = struct.Struct("@20i")
"""struct serial_icounter_struct of linux/serial.h; the fields that count line errors follow."""

_LINE_ERRORS = {6: "framing", 7: "overrun", 8: "parity", 9: "break", 10: "buffer overrun"}


class SerialPort(NamedTuple):
    """What a URL says of a port; always 8 data bits, no parity, 1 stop bit."""

    path: str
    baud: int = DEFAULT_BAUD
    rtscts: bool = False
    """Hardware flow control: both ends must have it, and the cable its two wires."""


class SerialLink(ByteLink):
    """One serial port, held exclusively while open."""

    def __init__(self, url: str, clock: Clock = time.monotonic) -> None:
        self._port = _open_port(url, parse_serial_url(url))
        super().__init__(url, self._port.fileno(), clock)
        self._low_latency = _ask_low_latency(self._port)
        self._line_errors = _line_errors(self._fd)
        # A delimiter ends whatever half frame the other end has from an earlier time.
        self._out += b"\0"

    def describe(self) -> str:
        flow = ", RTS/CTS" if self._port.rtscts else ""
        counters = "" if self._line_errors else ", no error counters"
        return f"{self.url}: {self._port.baudrate} baud{flow}, {self._low_latency}{counters}"

    def statistics(self) -> LinkStatistics:
        """With what the UART itself counted since the link was opened, where it has counters."""
        counted = super().statistics()
        now = _line_errors(self._fd) if self._fd >= 0 else {}
        uart = {kind: now[kind] - before for kind, before in self._line_errors.items() if now}
        errors = {**counted.errors, **{kind: count for kind, count in uart.items() if count}}
        return dataclasses.replace(counted, errors=errors)

    def close(self) -> None:
        if self._fd < 0:
            return
        self._fd = -1
        _let_go(self._port)


def parse_serial_url(url: str) -> SerialPort:
    """Raises LinkError for anything that it does not know."""
    try:
        parts = urlsplit(url)
    except ValueError as error:
        raise LinkError(f"{url}: no address can be read from this: {error}") from None
    query = {key: found[-1] for key, found in parse_qs(parts.query, True).items()}
    baud = query.pop("baud", str(DEFAULT_BAUD))
    rtscts = query.pop("rtscts", "false")
    if query:
        raise LinkError(f"{url}: unknown option {', '.join(query)}; expected baud or rtscts")
    if parts.netloc or not parts.path or parts.fragment:
        raise LinkError(f"{url}: expected serial:///dev/NAME, with three slashes")
    if not (baud.isascii() and baud.isdecimal()) or not 0 < int(baud) <= MAX_BAUD:
        raise LinkError(f"{url}: baud={baud}; expected a whole number of 1 to {MAX_BAUD}")
    if rtscts not in ("true", "false"):
        raise LinkError(f"{url}: rtscts={rtscts}; expected true or false")
    return SerialPort(parts.path, int(baud), rtscts == "true")


def _open_port(url: str, wanted: SerialPort) -> serial.Serial:
    # Made closed, so that there is something to close whatever fails on the way.
    port = serial.Serial(None, wanted.baud, timeout=0, rtscts=wanted.rtscts, exclusive=True)
    port.port = wanted.path
    try:
        port.open()
        # `exclusive` is an advisory lock that other programs need not ask; this one they meet.
        fcntl.ioctl(port.fileno(), termios.TIOCEXCL)
        _end_of_file_means_gone(port.fileno())
    except (serial.SerialException, OSError, ValueError, termios.error) as error:
        _let_go(port)
        raise _in_words(url, wanted.path, error) from None
    return port


def _let_go(port: serial.Serial) -> None:
    """Close a port, also one that has gone."""
    with contextlib.suppress(OSError, serial.SerialException, termios.error):
        fcntl.ioctl(port.fileno(), termios.TIOCNXCL)
    with contextlib.suppress(OSError, serial.SerialException, termios.error):
        port.close()


def _end_of_file_means_gone(fd: int) -> None:
    """pyserial sets VMIN = 0, and then an idle line reads as an end of file, like an unplugged one.

    With VMIN = 1 an idle non-blocking read raises BlockingIOError.
    """
    attributes = termios.tcgetattr(fd)
    attributes[6][termios.VMIN], attributes[6][termios.VTIME] = 1, 0
    termios.tcsetattr(fd, termios.TCSANOW, attributes)


def _in_words(url: str, path: str, error: Exception) -> LinkError:
    number = getattr(error, "errno", None)
    text = str(error)
    if number in (errno.EBUSY, errno.EAGAIN, errno.EWOULDBLOCK) or "exclusively lock" in text:
        return LinkBusy(
            f"{url}: {path} is in use by another program; close it, or find it with `fuser {path}`"
        )
    if number in (errno.ENOENT, errno.ENODEV, errno.ENXIO):
        return LinkError(
            f"{url}: there is no port {path}; check the cable and the name in /dev/serial/by-id"
        )
    if number in (errno.EACCES, errno.EPERM):
        return LinkError(
            f"{url}: no permission to open {path}; your user usually has to be in the group dialout"
        )
    return LinkError(f"{url}: {path} cannot be opened as a serial port: {text}")


def _ask_low_latency(port: serial.Serial) -> str:
    """Ask the driver to hand bytes on at once; what came of it, in words."""
    try:
        port.set_low_latency_mode(True)
    except (ValueError, OSError, NotImplementedError, AttributeError) as error:
        return f"no low-latency mode ({str(error) or 'the port has none'})"
    return "low-latency mode"


def _line_errors(fd: int) -> dict[str, int]:
    """The UART's counters of line errors; empty where the port has none, as a pseudo-terminal."""
    try:
        raw = fcntl.ioctl(fd, _TIOCGICOUNT, bytes(_ICOUNT.size))
    except OSError:
        return {}
    counts = _ICOUNT.unpack(raw)
    return {kind: counts[place] for place, kind in _LINE_ERRORS.items()}
