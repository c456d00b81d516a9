"""Cost of the wire against its bare parts: stuffing and checksum, os.read, pyzmq; and a full line.

Run as a script; it prints ratios and fails where one is far off its aim. Absolute times are those
of the machine. The last row is measured on a relay that lets 1 Mbit/s through, not computed.
"""

import os
import pty
import select
import sys
import tempfile
import time
import tty
from collections.abc import Callable
from pathlib import Path
from typing import Any

import zmq
from cobs import cobs
from crc32c import crc32c

from drivers import limits
from drivers.codec import pack_frame, unpack_frame
from drivers.framing import FrameSplitter, stuff
from drivers.link import Link
from drivers.messages import Samples, decode, encode
from drivers.open import DAEMON, RIG, open_link

BLOCK = bytes(range(1, 201)) * 3
MAX_FRAME = limits.HEADER_BYTES + limits.MAX_SERIAL_BODY_BYTES + limits.CRC_BYTES
BITS_A_BYTE = 10
"""Start bit, 8 data bits, stop bit."""

BAUD = 1_000_000
LINE_S = 2.0
RUNS = 60
SPARE = 1.5
"""Noise of a shared machine: a ratio is called too large from this factor over its aim on."""


def main() -> int:
    """Measure, print, judge; 0 if every ratio is near its aim."""
    results = [share_of_samples(), *codec(), terminal(), *zeromq(), full_line()]
    print(f"{'':58} {'measured':>9} {'aim':>9}")
    bad = 0
    for name, found, aim, larger_is_better in results:
        met = found >= aim if larger_is_better else found <= aim * SPARE
        bad += not met
        sign = ">=" if larger_is_better else "<="
        print(f"{name:58} {found:9.3f} {sign}{aim:7.2f}  {'' if met else 'TOO FAR OFF'}")
    return 1 if bad else 0


Result = tuple[str, float, float, bool]


def seconds(action: Callable[[], object]) -> float:
    start = time.perf_counter()
    action()
    return time.perf_counter() - start


def best_of(action: Callable[[], object]) -> float:
    """Least time of some runs, in seconds: what disturbs them only adds."""
    return min(seconds(action) for _ in range(RUNS))


def ratio(ours: Callable[[], object], bare: Callable[[], object]) -> float:
    """Ours over bare, taken in turn so that both meet the same disturbances."""
    pairs = [(seconds(ours), seconds(bare)) for _ in range(RUNS)]
    return min(one for one, _ in pairs) / min(other for _, other in pairs)


def samples_frame() -> bytes:
    return pack_frame(0x11223344, 0, encode(Samples(2**32 - 1, 2**32 - 2, BLOCK)))


def share_of_samples() -> Result:
    wire = stuff(samples_frame())
    return "share of a full serial frame that is samples", len(BLOCK) / len(wire), 0.95, True


def codec() -> list[Result]:
    """Frames of 600 bytes of samples, without and with the message in them; 1,000 at a time."""
    body = encode(Samples(1, 1, BLOCK))
    frame = pack_frame(1, 0, body)
    wire = stuff(frame) * 100
    send = ratio(
        lambda: [stuff(pack_frame(1, 0, body)) for _ in range(1000)],
        lambda: [cobs.encode(frame + crc32c(frame).to_bytes(4, "little")) for _ in range(1000)],
    )
    take = ratio(lambda: take_ours(wire), lambda: take_bare(wire))
    # One frame takes this long on the line, whatever the machine.
    line_s = len(stuff(frame)) * BITS_A_BYTE / BAUD
    spent_s = best_of(lambda: take_ours(wire)) + best_of(
        lambda: [decode(body) for _ in range(1000)]
    )
    return [
        ("pack and stuff / bare cobs + crc32c", send, 2.0, False),
        ("split, unstuff, check / bare split + cobs + crc32c", take, 2.5, False),
        ("1 Mbit/s: receiver's share of one core (computed)", spent_s / 1000 / line_s, 0.02, False),
    ]


def take_ours(wire: bytes) -> None:
    splitter = FrameSplitter(MAX_FRAME)
    for _ in range(10):
        for found in splitter.feed(wire):
            unpack_frame(found, limits.MAX_SERIAL_BODY_BYTES)


def take_bare(wire: bytes) -> None:
    for _ in range(10):
        for stuffed in wire.split(b"\0"):
            if stuffed:
                crc32c(cobs.decode(stuffed))


def terminal() -> Result:
    """The same bytes through a pseudo-terminal: our link's reading, and os.read alone."""
    wire = stuff(samples_frame()) * 6  # one write that the terminal takes at once
    assert len(wire) < 4000
    master, slave = pty.openpty()
    tty.setraw(slave)
    link = open_link(f"serial://{os.ttyname(slave)}")

    def ours() -> None:
        for _ in range(300):
            os.write(master, wire)
            taken = 0
            while taken < 6:
                taken += len(link.receive())

    def bare() -> None:
        for _ in range(300):
            os.write(master, wire)
            left = len(wire)
            while left:
                try:
                    left -= len(os.read(slave, 65536))
                except BlockingIOError:
                    continue

    os.set_blocking(slave, False)
    found = ratio(ours, bare)
    link.close()
    os.close(master)
    os.close(slave)
    return "serial link on a pty / bare os.write + os.read", found, 2.0, False


def zeromq() -> list[Result]:
    """Our links and bare sockets of the same kinds: a stream of blocks, and single round trips."""
    results: list[Result] = []
    for size in (600, limits.MESSAGE_BLOCK_BYTES):
        with tempfile.TemporaryDirectory(prefix="w") as folder:
            rig = open_link(f"zmq+ipc://{folder}/ours", RIG)
            daemon = open_link(rig.url, DAEMON)
            # Two contexts, as two processes have: each brings its own thread.
            contexts: list[zmq.Context[Any]] = [zmq.Context(), zmq.Context()]
            router, dealer = contexts[0].socket(zmq.ROUTER), contexts[1].socket(zmq.DEALER)
            router.bind(f"ipc://{folder}/bare")
            dealer.connect(f"ipc://{folder}/bare")
            ours, bare = Ours(daemon, rig, bytes(size)), Bare(dealer, router, bytes(size))
            stream = ratio(ours.stream, bare.stream)
            there_and_back = ratio(ours.round_trips, bare.round_trips)
            results += [
                (f"ZeroMQ stream of {size} B frames / bare pyzmq", stream, 1.1, False),
                (f"ZeroMQ round trip of {size} B / bare pyzmq", there_and_back, 1.3, False),
            ]
            daemon.close()
            rig.close()
            for context in contexts:
                context.destroy(linger=0)
    return results


BURST = 100


class Ours:
    """What is measured of two links."""

    def __init__(self, daemon: Link, rig: Link, frame: bytes) -> None:
        self._daemon, self._rig, self._frame = daemon, rig, frame
        daemon.send(frame)
        while daemon.wants_write:
            daemon.pollable.poll(1000, zmq.POLLOUT)
            daemon.flush()
        rig.pollable.poll(1000)
        self._peer = rig.receive()[0].peer

    def stream(self) -> None:
        for _ in range(BURST):
            self._rig.send(self._frame, self._peer)
        taken = 0
        while taken < BURST:
            self._daemon.pollable.poll(1000)
            taken += len(self._daemon.receive())

    def round_trips(self) -> None:
        for _ in range(BURST):
            self._daemon.send(self._frame)
            self._rig.pollable.poll(1000)
            (one,) = self._rig.receive()
            self._rig.send(one.data, one.peer)
            self._daemon.pollable.poll(1000)
            self._daemon.receive()


class Bare:
    """The same of two sockets in a poll loop, without any bookkeeping."""

    def __init__(self, dealer: zmq.Socket[Any], router: zmq.Socket[Any], frame: bytes) -> None:
        self._dealer, self._router, self._frame = dealer, router, frame
        dealer.send(frame)
        self._identity = router.recv_multipart()[0]

    def stream(self) -> None:
        for _ in range(BURST):
            self._router.send_multipart([self._identity, self._frame], zmq.NOBLOCK)
        taken = 0
        while taken < BURST:
            self._dealer.poll(1000)
            taken += len(_drain(self._dealer))

    def round_trips(self) -> None:
        for _ in range(BURST):
            self._dealer.send(self._frame, zmq.NOBLOCK)
            self._router.poll(1000)
            (parts,) = _drain(self._router)
            self._router.send_multipart(parts, zmq.NOBLOCK)
            self._dealer.poll(1000)
            _drain(self._dealer)


def _drain(socket: zmq.Socket[Any]) -> list[list[bytes]]:
    taken = []
    while True:
        try:
            taken.append(socket.recv_multipart(zmq.NOBLOCK))
        except zmq.Again:
            return taken


def full_line() -> Result:
    """Rig, relay and daemon in one loop: the share of the relay's time in which bytes pass."""
    with tempfile.TemporaryDirectory(prefix="w") as folder:
        rig = open_link(f"pty://{folder}/rig", RIG)
        relay_in = os.open(Path(folder) / "rig", os.O_RDWR | os.O_NOCTTY | os.O_NONBLOCK)
        relay_out, far = pty.openpty()
        tty.setraw(far)
        daemon = open_link(f"serial://{os.ttyname(far)}")
        passed, carried, first = 0, 0, 0
        start = time.perf_counter()
        while (now := time.perf_counter()) < start + LINE_S:
            while rig.flush():
                rig.send(pack_frame(1, 0, encode(Samples(1, first, BLOCK))))
                first += 50
            # What the line could have carried by now. A line that found nothing has lost its time.
            due = max(0, int((now - start) * BAUD / BITS_A_BYTE) - passed)
            data = _read(relay_in, min(due, 4000))
            os.write(relay_out, data)
            passed += len(data) if len(data) == due else due
            carried += sum(
                len(stuff(one.data)) for one in daemon.receive() if _understood(one.data)
            )
            select.select([relay_in], [], [], 0.0005)
        for fd in (relay_in, relay_out, far):
            os.close(fd)
        daemon.close()
        rig.close()
    share = carried * BITS_A_BYTE / BAUD / LINE_S
    return "1 Mbit/s relay: share of its time that carries whole frames", share, 0.95, True


def _read(fd: int, most: int) -> bytes:
    try:
        return os.read(fd, most)
    except BlockingIOError:
        return b""


def _understood(data: bytes) -> bool:
    frame = unpack_frame(data, limits.MAX_SERIAL_BODY_BYTES)
    return isinstance(decode(frame.body), Samples)


if __name__ == "__main__":
    sys.exit(main())
