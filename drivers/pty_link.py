"""pty:///path: the rig's end of a pseudo-terminal; the daemon opens the path as a serial port."""

import contextlib
import os
import pty
import time
import tty
from pathlib import Path
from urllib.parse import urlsplit

from drivers.byte_link import ByteLink, Clock
from drivers.errors import LinkError


class PtyLink(ByteLink):
    """A serial line made of software. Like a UART it drops what nobody reads, and never blocks."""

    def __init__(self, url: str, clock: Clock = time.monotonic) -> None:
        self._path = _path(url)
        # Its slave stays open: else reading the master fails whenever no daemon has it open.
        master, self._slave = pty.openpty()
        # Raw from the start: a terminal that echoes would answer the rig with its own bytes.
        tty.setraw(self._slave)
        super().__init__(url, master, clock)
        self._name = os.ttyname(self._slave)
        try:
            self._path.unlink(missing_ok=True)
            self._path.symlink_to(self._name)
        except OSError as error:
            os.close(master)
            os.close(self._slave)
            raise LinkError(f"{url}: {self._path} cannot be made: {error.strerror}") from None

    def describe(self) -> str:
        return f"{self.url}: open {self._path} (now {self._name}) as the serial port"

    def _on_stall(self) -> None:
        self._drop()

    def _on_backlog(self) -> None:
        self._drop()

    def _drop(self) -> None:
        """Nobody reads: what waits is lost, as on a wire."""
        self._errors["dropped"] += self._out.count(0)
        self._out.clear()
        # Ends the frame of which a part is on the line already.
        self._out += b"\0"
        self._stalled_since = None

    def close(self) -> None:
        if self._fd < 0:
            return
        os.close(self._fd)
        os.close(self._slave)
        self._fd = -1
        with contextlib.suppress(OSError):
            if os.readlink(self._path) == self._name:
                self._path.unlink()


def _path(url: str) -> Path:
    """Where the port shall appear. Raises LinkError, also where something else is in the way."""
    parts = urlsplit(url)
    path = Path(parts.path)
    if parts.netloc or parts.query or not path.is_absolute() or path.name == "":
        raise LinkError(f"{url}: expected pty:///path/of/a/new/link")
    # One that a rig which was killed has left behind may go, nothing else.
    if path.is_symlink() and os.readlink(path).startswith("/dev/pts/"):
        return path
    if path.is_symlink() or path.exists():
        raise LinkError(f"{url}: {path} exists and was not made by a rig; choose another path")
    return path
