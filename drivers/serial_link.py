"""serial:///dev/ttyX?baud=N: a serial port, opened and configured by pyserial.

pyserial's own read loop has open faults, so its file descriptor is read and written directly.
"""

import contextlib
import errno
import fcntl
import os
import termios
import time
from urllib.parse import parse_qs, urlsplit

import serial

from drivers.byte_link import ByteLink, Clock
from drivers.errors import LinkBusy, LinkError

DEFAULT_BAUD = 115200
MAX_BAUD = 12_000_000


class SerialLink(ByteLink):
    """One serial port, held exclusively while open."""

    def __init__(self, url: str, clock: Clock = time.monotonic) -> None:
        path, baud = parse_serial_url(url)
        self._port = _open_port(url, path, baud)
        _end_of_file_means_gone(self._port.fileno())
        super().__init__(url, self._port.fileno(), clock)
        self._low_latency = _ask_low_latency(self._port)
        # A delimiter ends whatever half frame the other end has from an earlier time.
        self._out += b"\0"

    def describe(self) -> str:
        return f"{self.url}: {self._port.baudrate} baud, {self._low_latency}"

    def close(self) -> None:
        if self._fd < 0:
            return
        self._fd = -1
        with contextlib.suppress(OSError, serial.SerialException):
            fcntl.ioctl(self._port.fileno(), termios.TIOCNXCL)
        with contextlib.suppress(OSError, serial.SerialException):
            self._port.close()


def parse_serial_url(url: str) -> tuple[str, int]:
    """Path and baud rate. Raises LinkError for keys it does not know."""
    parts = urlsplit(url)
    query = parse_qs(parts.query, keep_blank_values=True)
    baud = query.pop("baud", [str(DEFAULT_BAUD)])[-1]
    if query:
        raise LinkError(f"{url}: unknown option {', '.join(query)}; expected baud")
    if parts.netloc or not parts.path:
        raise LinkError(f"{url}: expected serial:///dev/NAME, with three slashes")
    if not baud.isdecimal() or not 0 < int(baud) <= MAX_BAUD:
        raise LinkError(f"{url}: baud={baud}; expected a whole number of 1 to {MAX_BAUD}")
    return parts.path, int(baud)


def _open_port(url: str, path: str, baud: int) -> serial.Serial:
    try:
        port = serial.Serial(path, baud, timeout=0, exclusive=True)
        # `exclusive` is an advisory lock that other programs need not ask; this one they meet.
        fcntl.ioctl(port.fileno(), termios.TIOCEXCL)
    except (serial.SerialException, OSError, ValueError) as error:
        raise _in_words(url, path, error) from None
    return port


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
    if number == errno.ENOENT:
        return LinkError(
            f"{url}: there is no port {path}; check the cable and the name in /dev/serial/by-id"
        )
    if number == errno.EACCES:
        return LinkError(
            f"{url}: no permission to open {path}; your user usually has to be in the group dialout"
        )
    return LinkError(f"{url}: {path} cannot be opened as a serial port: {text}")


def _ask_low_latency(port: serial.Serial) -> str:
    """Ask the driver to hand bytes on at once; what came of it, in words."""
    try:
        port.set_low_latency_mode(True)
    except (ValueError, OSError, NotImplementedError, AttributeError):
        return "no low-latency mode (the port has none)"
    return "low-latency mode"


def is_open_elsewhere(path: str) -> bool:
    """Whether another program holds the port exclusively right now."""
    try:
        os.close(os.open(path, os.O_RDWR | os.O_NOCTTY | os.O_NONBLOCK))
    except OSError as error:
        return error.errno == errno.EBUSY
    return False
