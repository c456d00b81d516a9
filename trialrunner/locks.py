"""One holder at a time of a record or a link: a lock file that the kernel frees at any exit."""

import contextlib
import errno
import fcntl
import hashlib
import os
from pathlib import Path
from types import TracebackType

from trialrunner.runtime_dir import runtime_dir


class Busy(Exception):
    """Another process holds it; the text names the process and what to do."""


class Lock:
    """A held lock; given back by `release`, by leaving its context, and by the process's end."""

    def __init__(self, path: Path, handle: int) -> None:
        self.path = path
        self._handle = handle

    @property
    def held(self) -> bool:
        return self._handle >= 0

    def release(self) -> None:
        if self._handle >= 0:
            # The file stays: removing it would let two processes hold locks of one name.
            os.close(self._handle)
            self._handle = -1

    def __enter__(self) -> "Lock":
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.release()


def hold_lock(path: Path, what: str) -> Lock:
    """Take the lock file `path` for `what` ("the record x"). Raises Busy, OSError."""
    handle = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o600)
    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError as error:
        holder = _read_holder(handle)
        os.close(handle)
        if error.errno not in (errno.EWOULDBLOCK, errno.EACCES):
            raise
        raise Busy(
            f"{what} is held by another trialrunner{holder}; stop that one, or use another"
        ) from None
    with contextlib.suppress(OSError):
        # Only a courtesy to whoever is refused: a full disk must not keep a daemon from starting.
        os.ftruncate(handle, 0)
        os.pwrite(handle, f"{os.getpid()}\n".encode(), 0)
    return Lock(path, handle)


def _read_holder(handle: int) -> str:
    text = os.pread(handle, 32, 0).decode(errors="replace").strip()
    return f" (process {text})" if text.isdecimal() else ""


def link_lock_path(url: str) -> Path:
    """Lock file of a link: the same for the same port or address, whatever its options."""
    address = url.partition("?")[0]
    if address.startswith("serial://"):
        # Two names of one port (by-id and ttyUSB0) are one port.
        address = "serial://" + os.path.realpath(address.removeprefix("serial://"))
    digest = hashlib.sha256(address.encode()).hexdigest()[:16]
    return runtime_dir() / f"link-{digest}.lock"
