"""Binding a ZeroMQ socket to an address of this machine that nobody else holds.

ZeroMQ's own bind on ipc:// deletes whatever file is there, also a live daemon's socket, and leaves
its own behind; a lock taken first makes the address exclusive, and a stale file safe to remove.
"""

import errno
import os
import re
import stat
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import zmq

from trialrunner.locks import Busy, hold_lock
from trialrunner.runtime_dir import MAX_IPC_PATH_BYTES, is_listening, make_private_dir

_LOOPBACK = re.compile(r"(127(\.\d{1,3}){3}|localhost|\[::1\]):(?P<port>\d{1,5}|\*)")

MAX_PORT = 65_535

_ONLY_LOCAL = (
    "expected ipc:///path or tcp://127.0.0.1:port; anybody who reaches it can command the rig, so "
    "reach it from another machine through a tunnel that asks who you are, such as ssh"
)


class AddressError(OSError):
    """An address at which a daemon may not listen; the text is for an operator."""


def socket_path(url: str) -> Path | None:
    """The file of an ipc address, None for loopback TCP. Raises AddressError for all others."""
    scheme, _, rest = url.partition("://")
    loopback = _LOOPBACK.fullmatch(rest) if scheme == "tcp" else None
    if loopback is not None:
        if loopback["port"] != "*" and not 0 < int(loopback["port"]) <= MAX_PORT:
            # ZeroMQ would take the number modulo 65536.
            raise AddressError(f"{url}: expected a port from 1 to {MAX_PORT}")
        return None
    if scheme != "ipc" or not rest:
        raise AddressError(f"{url}: {_ONLY_LOCAL}")
    if not rest.startswith("/"):
        # Relative: where it is depends on who asks. "@": no file, so no file mode protects it.
        raise AddressError(f"{url}: expected the full path of a socket, ipc:///run/name.command")
    size = len(os.fsencode(rest))
    if size > MAX_IPC_PATH_BYTES:
        raise AddressError(
            f"{url}: expected a path of at most {MAX_IPC_PATH_BYTES} bytes, found {size}; choose "
            "a shorter run name, or another place by the setting operator.command_url"
        )
    return Path(rest)


@contextmanager
def sole_owner(url: str) -> Iterator[None]:
    """Hold the address against other daemons; its socket file is gone before and after.

    Leave it only after the socket is closed. Raises Busy, AddressError, NotPrivate, OSError.
    """
    path = socket_path(url)
    if path is None:
        # The kernel itself refuses a second listener.
        yield
        return
    make_private_dir(path.parent)
    with hold_lock(path.with_name(f"{path.name}.lock"), f"the address {url}"):
        _remove_stale(path)
        yield
        path.unlink(missing_ok=True)


def _remove_stale(path: Path) -> None:
    try:
        mode = path.lstat().st_mode
    except FileNotFoundError:
        return
    if not stat.S_ISSOCK(mode):
        raise AddressError(f"{path}: expected no file or an old socket, found another kind of file")
    if is_listening(path):
        raise Busy(f"{path}: another program listens there; stop it or choose another address")
    path.unlink()


def bind_private(socket: "zmq.Socket[Any]", url: str) -> None:
    """Bind; the file of an ipc address is this user's alone. Raises Busy, AddressError."""
    socket.set(zmq.IPV6, int(url.startswith("tcp://[")))
    # ZeroMQ creates the file in this call and in this thread; a chmod afterwards would be late.
    umask = os.umask(0o177)
    try:
        socket.bind(url)
    except zmq.ZMQError as error:
        if error.errno == errno.EADDRINUSE:
            raise Busy(
                f"the address {url} is held by another program; stop it or choose another"
            ) from None
        raise AddressError(f"{url}: {error.strerror}; choose another address") from None
    finally:
        os.umask(umask)
