"""Opens the link that a URL names; each kind is imported only when it is asked for."""

import importlib
import time
from collections.abc import Callable
from urllib.parse import urlsplit

from drivers.errors import LinkError
from drivers.link import Link

DAEMON, RIG = "daemon", "rig"

_KINDS = {
    "serial": ("drivers.serial_link", "SerialLink"),
    "pty": ("drivers.pty_link", "PtyLink"),
    "zmq+tcp": ("drivers.zmq_link", "ZmqLink"),
    "zmq+ipc": ("drivers.zmq_link", "ZmqLink"),
}
"""Module and class of each scheme. To add a link: a file with a Link, and a row here."""


def schemes(role: str) -> tuple[str, ...]:
    """What a URL may begin with at that end; a pseudo-terminal is made by the rig alone."""
    return tuple(kind for kind in _KINDS if role == RIG or kind != "pty")


def open_link(url: str, role: str = DAEMON, clock: Callable[[], float] = time.monotonic) -> Link:
    """Open a link as the daemon or as the rig. Raises LinkError (LinkBusy if somebody has it)."""
    try:
        scheme = urlsplit(url).scheme
    except ValueError as error:
        raise LinkError(f"{url}: no address can be read from this: {error}") from None
    if scheme not in schemes(role):
        known = ", ".join(f"{kind}://" for kind in schemes(role))
        raise LinkError(f"{url}: no kind of link that a {role} opens; expected one of {known}")
    module, name = _KINDS[scheme]
    kind = getattr(importlib.import_module(module), name)
    link: Link = kind(url, role) if scheme.startswith("zmq") else kind(url, clock)
    return link
