"""Floods on the command socket, sent over a raw connection: memory comes back, others are served.

What ZMTP says on the wire is from RFC 23/ZMTP 3.0 (rfc.zeromq.org/spec/23, from memory).
"""

import fcntl
import json
import socket
import struct
import termios
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import psutil
import pytest
import zmq

from trialrunner.operator_messages import OperatorAnswer, OperatorRequest
from trialrunner.operator_socket import OperatorSocket

MORE, LAST = b"\x01", b"\x00"
"""Flags of a short frame; its size follows in one byte."""


@pytest.fixture
def path(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Short: Unix socket paths end at 107 bytes."""
    return tmp_path_factory.mktemp("f") / "run.command"


@pytest.fixture
def context() -> Iterator[zmq.Context[Any]]:
    with zmq.Context() as context:
        yield context


@pytest.fixture
def daemon(context: zmq.Context[Any], path: Path) -> Iterator[OperatorSocket]:
    daemon = OperatorSocket(context, f"ipc://{path}")
    yield daemon
    daemon.close()


def raw_peer(path: Path) -> socket.socket:
    """A connection after the handshake: greeting, NULL mechanism, READY as a DEALER."""
    peer = socket.socket(socket.AF_UNIX)
    peer.settimeout(10)
    peer.connect(str(path))
    signature, version = b"\xff" + bytes(8) + b"\x7f", b"\x03\x00"
    peer.sendall(signature + version + b"NULL".ljust(20, b"\0") + bytes(32))
    _read(peer, 64)
    ready = b"\x05READY\x0bSocket-Type" + struct.pack(">I", 6) + b"DEALER"
    peer.sendall(bytes([4, len(ready)]) + ready)
    _read(peer, _read(peer, 2)[1])
    return peer


def _read(peer: socket.socket, size: int) -> bytes:
    data = b""
    while len(data) < size:
        data += peer.recv(size - len(data))
    return data


def resident() -> int:
    return int(psutil.Process().memory_info().rss)


def unread(peer: socket.socket) -> int:
    """Bytes sent that the other side has not taken out of the kernel yet (SIOCOUTQ, unix(7))."""
    return struct.unpack("i", fcntl.ioctl(peer, termios.TIOCOUTQ, bytes(4)))[0]


def until(condition: Callable[[], bool], daemon: OperatorSocket) -> None:
    """Turn the daemon's socket until something is the case."""
    for _ in range(2_000):
        if condition():
            return
        # Waits for what arrives; ZeroMQ frees what a lost peer left within such calls.
        daemon.socket.poll(5)
        daemon.receive()
    pytest.fail(f"it never happened; {resident()} bytes are resident")


def ask(context: zmq.Context[Any], daemon: OperatorSocket, number: int) -> bool:
    """Whether another client is served now."""
    with context.socket(zmq.DEALER) as client:
        client.set(zmq.LINGER, 0)
        client.connect(daemon.url)
        request = OperatorRequest(f"request-{number}", "pause", "Ada", "flood")
        client.send(request.to_json().encode())
        assert daemon.socket.poll(5_000)
        [(handle, got)] = daemon.receive()
        daemon.answer(handle, OperatorAnswer(got.id, True, "", 1, "2026-12-01T00:00:00Z"))
        assert client.poll(5_000)
        return bool(json.loads(client.recv())["ok"])


@pytest.mark.slow
def test_a_message_without_end_costs_memory_only_while_its_sender_lives(
    context: zmq.Context[Any], daemon: OperatorSocket, path: Path
) -> None:
    """Endless `more` frames pass every limit of libzmq; the directory's mode keeps strangers out.

    What is left to show: the loop never sees them, others are served meanwhile, and ten such
    senders, one after the other, take no more than one.
    """
    frames = (MORE + b"\x01x") * 300_000
    gone = daemon.socket.get_monitor_socket(zmq.EVENT_DISCONNECTED)
    before = resident()
    grown = []
    for number in range(10):
        attacker = raw_peer(path)
        attacker.sendall(frames)
        until(lambda peer=attacker: unread(peer) == 0, daemon)
        assert ask(context, daemon, number)
        grown.append(resident() - before)
        attacker.close()
        # The attacker's end and that of the client that asked.
        for _ in range(2):
            until(lambda: bool(gone.poll(0)), daemon)
            gone.recv_multipart()
    daemon.socket.disable_monitor()
    gone.close()
    assert daemon.counts.requests == 10
    assert daemon.counts.refused == 0
    assert max(grown) < 3 * max(grown[0], 10_000_000), grown


@pytest.mark.slow
def test_a_message_of_very_many_frames_is_refused_and_freed(
    daemon: OperatorSocket, path: Path
) -> None:
    """Complete ones are read frame by frame and dropped."""
    before = resident()
    for number in range(1, 6):
        peer = raw_peer(path)
        peer.sendall((MORE + b"\x01x") * 50_000 + LAST + b"\x00")
        until(lambda done=number: daemon.counts.refused == done, daemon)
        peer.close()
    until(lambda: resident() - before < 5_000_000, daemon)


@pytest.mark.slow
def test_floods_of_good_requests_leave_a_bounded_memory(
    context: zmq.Context[Any], daemon: OperatorSocket
) -> None:
    """Thousands of different notes with reasons of full length; the journal keeps a thousand."""

    def flood(first: int, count: int) -> None:
        with context.socket(zmq.DEALER) as client:
            client.set(zmq.LINGER, 0)
            client.connect(daemon.url)
            for number in range(first, first + count):
                request = OperatorRequest(f"request-{number:09d}", "note", "Ada", "x" * 1_000)
                client.send(request.to_json().encode())
                assert daemon.socket.poll(5_000)
                for handle, got in daemon.receive():
                    daemon.answer(
                        handle, OperatorAnswer(got.id, True, "", 1, "2026-12-01T00:00:00Z")
                    )
                client.recv()

    flood(0, 1_500)
    before = resident()
    flood(1_500, 4_500)
    assert resident() - before < 3_000_000
    assert daemon.counts.requests == 6_000


@pytest.mark.slow
def test_half_a_handshake_is_ended(daemon: OperatorSocket, path: Path) -> None:
    """A peer that connects and says nothing loses its connection after two seconds."""
    silent = socket.socket(socket.AF_UNIX)
    silent.settimeout(10)
    silent.connect(str(path))
    while silent.recv(100):
        pass
    silent.close()
