"""zmq+tcp://host:port and zmq+ipc:///path: one frame a ZeroMQ message.

The daemon connects a DEALER, the rig binds a ROUTER and answers whom it greeted. Sockets carry no
authentication: keep them on the loopback, on ipc in a private directory, or on a line of their own.
"""

from pathlib import Path
from urllib.parse import urlsplit

import zmq

from drivers import limits
from drivers.errors import LinkBusy, LinkError, LinkLost
from drivers.link import Link, Received

MAX_IPC_PATH = 107
"""Bytes of a Unix socket's path that the system allows."""

HEARTBEAT_MS = 1000
MAX_PEERS = 64
RECEIVE_BATCH = 1000
"""Frames taken in one call, so that a flood cannot hold the loop."""


class ZmqLink(Link):
    max_body = limits.MAX_MESSAGE_BODY_BYTES
    block_bytes = limits.MESSAGE_BLOCK_BYTES

    def __init__(self, url: str, role: str) -> None:
        super().__init__()
        self.url = url
        self._router = role == "rig"
        address = _address(url)
        self._context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self._socket = self._context.socket(zmq.ROUTER if self._router else zmq.DEALER)
        self._peers: dict[bytes, int] = {}
        self._unix_path = Path(address[6:]) if self._router and address.startswith("ipc") else None
        try:
            self._configure()
            if self._router:
                self._bind(address)
            else:
                self._socket.connect(address)
        except zmq.ZMQError as error:
            self._destroy()
            raise _in_words(url, error) from None
        except LinkError:
            self._destroy()
            raise

    def _configure(self) -> None:
        overhead = limits.HEADER_BYTES + limits.CRC_BYTES
        for option, value in (
            (zmq.LINGER, 0),
            (zmq.MAXMSGSIZE, self.max_body + overhead),
            (zmq.SNDHWM, 1000),
            (zmq.RCVHWM, 1000),
            (zmq.HANDSHAKE_IVL, 2000),
            (zmq.HEARTBEAT_IVL, HEARTBEAT_MS),
            (zmq.HEARTBEAT_TIMEOUT, 3 * HEARTBEAT_MS),
            (zmq.IMMEDIATE, 0 if self._router else 1),
        ):
            self._socket.setsockopt(option, value)
        if self._router:
            self._socket.setsockopt(zmq.ROUTER_MANDATORY, 1)

    def _bind(self, address: str) -> None:
        """A second bind of an ipc path silently steals it: ask first whether somebody listens."""
        if self._unix_path is not None and self._unix_path.exists():
            if _listens(self._unix_path):
                raise LinkBusy(
                    f"{self.url}: another program listens there; stop it or choose another"
                )
            self._unix_path.unlink()
        self._socket.bind(address)

    @property
    def pollable(self) -> zmq.Socket[bytes]:
        return self._socket

    @property
    def wants_write(self) -> bool:
        return False

    def send(self, frame: bytes, peer: int = 0) -> None:
        self._require_open()
        head = [self._identity(peer)] if self._router else []
        try:
            self._socket.send_multipart([*head, frame], zmq.NOBLOCK)
        except zmq.Again:
            self._errors["not taken"] += 1
            return
        except zmq.ZMQError:
            # The peer has gone or was never there; its silence is noticed by whoever waits.
            self._errors["no peer"] += 1
            return
        self._count_out(len(frame))

    def receive(self) -> list[Received]:
        self._require_open()
        taken: list[Received] = []
        for _ in range(RECEIVE_BATCH):
            try:
                received = self._receive_one()
            except zmq.Again:
                break
            except zmq.ZMQError as error:
                raise LinkLost(f"{self.url}: receiving failed: {error}") from None
            if received is not None:
                taken.append(received)
        self._count_in([one.data for one in taken])
        return taken

    def _receive_one(self) -> Received | None:
        """One message frame by frame: what has too many parts is dropped as it comes."""
        parts: list[bytes] = []
        wanted = 2 if self._router else 1
        more, count = True, 0
        while more:
            part = self._socket.recv(zmq.NOBLOCK if count == 0 else 0)
            more = bool(self._socket.getsockopt(zmq.RCVMORE))
            count += 1
            if count <= wanted:
                parts.append(part)
        if count != wanted:
            self._errors["parts"] += 1
            return None
        peer = self._number(parts[0]) if self._router else 0
        return Received(parts[-1], peer)

    def _number(self, identity: bytes) -> int:
        """A small number for a peer; the oldest is forgotten when there are too many."""
        if identity not in self._peers:
            if len(self._peers) >= MAX_PEERS:
                self._peers.pop(next(iter(self._peers)))
            self._counts["peers"] += 1
            self._peers[identity] = self._counts["peers"]
        return self._peers[identity]

    def _identity(self, peer: int) -> bytes:
        for identity, number in self._peers.items():
            if number == peer:
                return identity
        return b"\0nobody"

    def flush(self) -> bool:
        self._require_open()
        return True

    def close(self) -> None:
        if not self._socket.closed:
            self._destroy()
            if self._unix_path is not None:
                self._unix_path.unlink(missing_ok=True)

    def _destroy(self) -> None:
        self._socket.close(0)
        self._context.term()

    def _require_open(self) -> None:
        if self._socket.closed:
            raise LinkLost(f"{self.url}: the link is closed")


def _address(url: str) -> str:
    """The ZeroMQ address in a URL. Raises LinkError."""
    parts = urlsplit(url)
    if parts.scheme == "zmq+ipc":
        if len(parts.path.encode()) > MAX_IPC_PATH:
            raise LinkError(f"{url}: the path has over {MAX_IPC_PATH} bytes; choose a shorter one")
        if not parts.path.startswith("/") or parts.netloc:
            raise LinkError(f"{url}: expected zmq+ipc:///path, with three slashes")
        return f"ipc://{parts.path}"
    try:
        port = parts.port
    except ValueError:
        port = None
    if port is None or not parts.hostname:
        raise LinkError(f"{url}: expected zmq+tcp://host:port")
    return f"tcp://{parts.netloc}"


def _listens(path: Path) -> bool:
    import socket

    with socket.socket(socket.AF_UNIX) as probe:
        try:
            probe.connect(str(path))
        except OSError:
            return False
        return True


def _in_words(url: str, error: zmq.ZMQError) -> LinkError:
    if error.errno == zmq.EADDRINUSE:
        return LinkBusy(f"{url}: another program listens there; stop it or choose another")
    return LinkError(f"{url}: {zmq.strerror(error.errno or 0)}")
