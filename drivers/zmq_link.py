"""zmq+tcp://host:port and zmq+ipc:///path: one frame a ZeroMQ message.

The daemon connects a DEALER, the rig binds a ROUTER and answers whom it greeted. Sockets carry no
authentication: keep them on the loopback, on ipc in a private directory, or on a line of their own.
A peer that sends one message of endless parts fills memory before this file sees any of it; only
keeping strangers out helps against that.
"""

import contextlib
import errno
import stat
from collections import deque
from pathlib import Path
from urllib.parse import urlsplit

import zmq

from drivers import limits
from drivers.errors import LinkBusy, LinkError, LinkLost
from drivers.link import Link, Received

MAX_IPC_PATH = 107
"""Bytes of a Unix socket's path that the system allows."""

HEARTBEAT_MS = 1000
"""ZeroMQ's own; three missed ones end the connection, a stopped process is noticed like that."""

HANDSHAKE_MS = 2000
MAX_PEERS = 64
"""Peers that a rig tells apart; the one that was quiet for longest is forgotten first."""

HIGH_WATER = 256
"""Messages that ZeroMQ holds each way for a peer: 16 MiB of the largest blocks."""

RECEIVE_BATCH = 256
"""Frames taken in one call, so that a flood cannot hold the caller's loop."""


class ZmqLink(Link):
    """One end; `role` is "daemon" (DEALER, connects) or "rig" (ROUTER, binds)."""

    max_body = limits.MAX_MESSAGE_BODY_BYTES
    block_bytes = limits.MESSAGE_BLOCK_BYTES

    def __init__(self, url: str, role: str) -> None:
        super().__init__()
        self.url = url
        self._router = role == "rig"
        address = _address(url, self._router)
        self._context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
        self._socket = self._context.socket(zmq.ROUTER if self._router else zmq.DEALER)
        self._queue: deque[tuple[bytes | None, bytes]] = deque()
        self._queued_bytes = 0
        self._peers: dict[bytes, int] = {}
        self._unix_path = Path(address[6:]) if self._router and address.startswith("ipc") else None
        try:
            self._configure()
            if self._router:
                self._bind(address)
            else:
                # Tells of the end of a connection that stood, not of one that was never made.
                self._monitor = self._socket.get_monitor_socket(zmq.EVENT_DISCONNECTED)
                self._socket.connect(address)
        except zmq.ZMQError as error:
            self._context.destroy(linger=0)
            raise _in_words(url, error) from None
        except LinkError:
            self._context.destroy(linger=0)
            raise

    def _configure(self) -> None:
        overhead = limits.HEADER_BYTES + limits.CRC_BYTES
        for option, value in (
            (zmq.LINGER, 0),
            (zmq.MAXMSGSIZE, self.max_body + overhead),
            (zmq.SNDHWM, HIGH_WATER),
            (zmq.RCVHWM, HIGH_WATER),
            (zmq.HANDSHAKE_IVL, HANDSHAKE_MS),
            (zmq.HEARTBEAT_IVL, HEARTBEAT_MS),
            (zmq.HEARTBEAT_TIMEOUT, 3 * HEARTBEAT_MS),
            (zmq.IPV6, 1 if "[" in self.url else 0),
            # Nothing is promised to a peer that is not there: what waits, waits in our own queue.
            (zmq.IMMEDIATE, 0 if self._router else 1),
        ):
            self._socket.setsockopt(option, value)
        if self._router:
            self._socket.setsockopt(zmq.ROUTER_MANDATORY, 1)

    def _bind(self, address: str) -> None:
        """A second bind of an ipc path silently steals it: ask first whether somebody listens."""
        if self._unix_path is not None:
            _make_room(self.url, self._unix_path)
        self._socket.bind(address)
        if self._unix_path is None and urlsplit(self.url).port == 0:
            self.url = "zmq+" + self._socket.getsockopt_string(zmq.LAST_ENDPOINT).rstrip("\0")

    def describe(self) -> str:
        return f"{self.url}: ZeroMQ {zmq.zmq_version()}, {'bound' if self._router else 'connects'}"

    @property
    def pollable(self) -> zmq.Socket[bytes]:
        return self._socket

    @property
    def wants_write(self) -> bool:
        return bool(self._queue)

    def send(self, frame: bytes, peer: int = 0) -> None:
        self._require_open()
        identity = self._identity(peer) if self._router else None
        if self._queue or not self._put(identity, frame):
            if self._queued_bytes > limits.MAX_BACKLOG_BYTES:
                self._on_backlog()
            self._queue.append((identity, frame))
            self._queued_bytes += len(frame)
        self._count_out(len(frame))

    def _put(self, identity: bytes | None, frame: bytes) -> bool:
        """Hand one frame to ZeroMQ; false if it has no room."""
        try:
            if identity is not None:
                self._socket.send(identity, zmq.NOBLOCK | zmq.SNDMORE)
            self._socket.send(frame, zmq.NOBLOCK)
        except zmq.Again:
            return False
        except zmq.ZMQError:
            # The peer has gone or was never there; its silence is noticed by whoever waits.
            self._errors["no peer"] += 1
        return True

    def _on_backlog(self) -> None:
        """A rig goes on with what comes next, as a UART would; a daemon gives the line up."""
        if not self._router:
            raise LinkLost(f"{self.url}: the rig takes nothing; {self._queued_bytes} bytes wait")
        self._errors["dropped"] += len(self._queue)
        self._queue.clear()
        self._queued_bytes = 0

    def flush(self) -> bool:
        self._require_open()
        while self._queue:
            if not self._put(*self._queue[0]):
                return False
            _, sent = self._queue.popleft()
            self._queued_bytes -= len(sent)
        return True

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
        if not taken and self._broken():
            raise LinkLost(f"{self.url}: the connection to the rig broke")
        self._count_in([one.data for one in taken])
        return taken

    def _broken(self) -> bool:
        """Looked at only when nothing came, so that no frame is lost for it."""
        return not self._router and bool(int(self._monitor.getsockopt(zmq.EVENTS)) & zmq.POLLIN)

    def _receive_one(self) -> Received | None:
        """One message frame by frame: what has too many parts is dropped as it comes."""
        parts: list[bytes] = []
        wanted = 2 if self._router else 1
        more, count = True, 0
        while more:
            # The parts after the first are there with it, so that this never waits. A Frame knows
            # whether more follows; asking the socket would cost as much as the receiving.
            part = self._socket.recv(zmq.NOBLOCK, copy=False)
            more = part.more
            count += 1
            if count <= wanted:
                parts.append(part.bytes)
        if count != wanted:
            self._errors["parts"] += 1
            return None
        return Received(parts[-1], self._number(parts[0]) if self._router else 0)

    def _number(self, identity: bytes) -> int:
        """A small number for a peer, kept for as long as it is among the last to have spoken."""
        number = self._peers.pop(identity, 0)
        if not number:
            self._counts["peers"] += 1
            number = self._counts["peers"]
            if len(self._peers) >= MAX_PEERS:
                del self._peers[next(iter(self._peers))]
        self._peers[identity] = number
        return number

    def _identity(self, peer: int) -> bytes:
        """Most often that of the peer that spoke last."""
        found = (one for one, number in reversed(self._peers.items()) if number == peer)
        return next(found, b"\0nobody")

    def close(self) -> None:
        if self._socket.closed:
            return
        self._context.destroy(linger=0)
        if self._unix_path is not None:
            with contextlib.suppress(OSError):
                self._unix_path.unlink()

    def _require_open(self) -> None:
        if self._socket.closed:
            raise LinkLost(f"{self.url}: the link is closed")


def _address(url: str, binds: bool) -> str:
    """The ZeroMQ address in a URL. Raises LinkError."""
    parts = urlsplit(url)
    if parts.query or parts.fragment:
        raise LinkError(f"{url}: a ZeroMQ link has no options; leave out what follows ? or #")
    if parts.scheme == "zmq+ipc":
        if len(parts.path.encode()) > MAX_IPC_PATH:
            raise LinkError(f"{url}: the path has over {MAX_IPC_PATH} bytes; choose a shorter one")
        if len(parts.path) < 2 or parts.netloc:
            raise LinkError(f"{url}: expected zmq+ipc:///path, with three slashes")
        return f"ipc://{parts.path}"
    try:
        port = parts.port
    except ValueError:
        port = None
    # Port 0 is any free one, which only the side that binds can have.
    if port is None or not parts.hostname or parts.path or (port == 0 and not binds):
        raise LinkError(f"{url}: expected zmq+tcp://host:port")
    return f"tcp://{parts.netloc}"


def _make_room(url: str, path: Path) -> None:
    """Remove the socket that a killed rig left behind. Raises LinkError for anything else."""
    try:
        mode = path.lstat().st_mode
    except OSError:
        return
    if not stat.S_ISSOCK(mode):
        raise LinkError(f"{url}: {path} exists and is no socket; choose another path")
    if _listens(path):
        raise LinkBusy(f"{url}: another program listens there; stop it or choose another path")
    with contextlib.suppress(OSError):
        path.unlink()


def _listens(path: Path) -> bool:
    import socket

    with socket.socket(socket.AF_UNIX) as probe:
        try:
            probe.connect(str(path))
        except OSError:
            return False
        return True


_REMEDIES = {
    zmq.EADDRNOTAVAIL: "that address is none of this machine; see `ip address`",
    errno.ENODEV: "that address is none of this machine; see `ip address`",
    errno.ENOENT: "the directory does not exist; make it first",
    errno.EACCES: "no permission; choose a directory or port that your user may use",
}
"""Plain words for what binding and connecting fail with."""


def _in_words(url: str, error: zmq.ZMQError) -> LinkError:
    number = error.errno or 0
    if number == zmq.EADDRINUSE:
        return LinkBusy(f"{url}: another program listens there; stop it or choose another address")
    return LinkError(f"{url}: {_REMEDIES.get(number, zmq.strerror(number))}")
