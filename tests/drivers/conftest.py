"""A second, slow coder written from the published descriptions, and links in pairs.

The coder shares nothing with drivers: bit by bit, byte by byte, so that one mistake cannot hide in
both. Every link of the project is offered as the fixture `pair`, so that one suite runs over all.
"""

import struct
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
import zmq

from drivers.link import Link, Received
from drivers.memory_link import MemoryLink
from drivers.open import DAEMON, RIG, open_link

FAILURE_MS = 10_000
"""A wait that takes so long has failed; no test counts on how long one takes."""


class SlowCoder:
    """Frames and bodies as PROTOCOL.md describes them."""

    @staticmethod
    def crc32c(data: bytes) -> int:
        """Reflected polynomial 0x82F63B78, one bit at a time."""
        crc = 0xFFFFFFFF
        for byte in data:
            crc ^= byte
            for _ in range(8):
                crc = crc >> 1 ^ (0x82F63B78 if crc & 1 else 0)
        return crc ^ 0xFFFFFFFF

    @staticmethod
    def stuff(data: bytes) -> bytes:
        """COBS as in the paper: each code byte says where the next zero would be."""
        out, run = bytearray(), bytearray()
        for byte in data:
            if byte:
                run.append(byte)
            if not byte or len(run) == 254:
                out += bytes([len(run) + 1]) + run
                run.clear()
        # A full run at the very end needs no empty one after it.
        if run or not data or data[-1] == 0:
            out += bytes([len(run) + 1]) + run
        return bytes(out)

    @staticmethod
    def unstuff(data: bytes) -> bytes | None:
        """None for what no encoder makes."""
        out, at = bytearray(), 0
        while at < len(data):
            code = data[at]
            run = data[at + 1 : at + code]
            if code == 0 or 0 in run or len(run) != code - 1:
                return None
            out += run
            at += code
            if code < 255 and at < len(data):
                out.append(0)
        return bytes(out) if data else None

    def pack(self, value: Any) -> bytes:
        """MessagePack, always in the shortest form; floats in 64 bits."""
        if value is True or value is False:
            return b"\xc3" if value else b"\xc2"
        if isinstance(value, int):
            return self._pack_int(value)
        if isinstance(value, float):
            return b"\xcb" + struct.pack(">d", value)
        if isinstance(value, str):
            text = value.encode()
            head = bytes([0xA0 + len(text)]) if len(text) < 32 else bytes([0xD9, len(text)])
            return head + text
        if isinstance(value, bytes):
            short = len(value) < 256
            head = b"\xc4" + bytes([len(value)]) if short else b"\xc5" + _big(len(value), 2)
            return head + value
        head = bytes([0x90 + len(value)]) if len(value) < 16 else b"\xdc" + _big(len(value), 2)
        return head + b"".join(self.pack(one) for one in value)

    @staticmethod
    def _pack_int(value: int) -> bytes:
        if value < 128:
            return bytes([value])
        size = next(n for n in (1, 2, 4, 8) if value < 1 << (8 * n))
        return bytes([0xCC + (1, 2, 4, 8).index(size)]) + _big(value, size)

    def frame(self, session: int, sequence: int, body: bytes) -> bytes:
        covered = session.to_bytes(4, "little") + sequence.to_bytes(4, "little") + body
        return covered + self.crc32c(covered).to_bytes(4, "little")

    def wire(self, session: int, sequence: int, body: bytes) -> bytes:
        return self.stuff(self.frame(session, sequence, body)) + b"\0"


def _big(value: int, size: int) -> bytes:
    return value.to_bytes(size, "big")


@pytest.fixture(scope="session")
def slow() -> SlowCoder:
    return SlowCoder()


class Pair:
    """Both ends of one link, driven by waiting on what they offer to a poller."""

    def __init__(self, kind: str, daemon: Link, rig: Link) -> None:
        self.kind = kind
        self.daemon = daemon
        self.rig = rig
        self.peer = 0
        """The daemon as the rig knows it, after `introduce`."""

    def wait(self) -> None:
        """Until either end can read, or write what it wants to write."""
        poller, waiting = zmq.Poller(), False
        for link in (self.daemon, self.rig):
            if link.pollable is not None:
                wanted = zmq.POLLIN | (zmq.POLLOUT if link.wants_write else 0)
                poller.register(link.pollable, wanted)
                waiting = True
        assert not waiting or poller.poll(FAILURE_MS), "nothing happens on this link any more"

    def until(self, done: Callable[[], bool]) -> None:
        """Turn both ends until something is the case."""
        while not done():
            self.wait()
            self.turn()

    def turn(self) -> None:
        self.daemon.flush()
        self.rig.flush()

    def collect(self, link: Link, count: int) -> list[Received]:
        """The next frames that come in at one end."""
        taken = link.receive()
        while len(taken) < count:
            self.turn()
            if link.pollable is not None:
                self.wait()
            more = link.receive()
            assert more or link.pollable is not None, f"{count - len(taken)} frames never came"
            taken += more
        return taken

    def introduce(self) -> None:
        """The daemon speaks first; a rig can answer only whom it heard."""
        self.daemon.send(b"first")
        (first,) = self.collect(self.rig, 1)
        self.peer = first.peer

    def close(self) -> None:
        self.daemon.close()
        self.rig.close()


KINDS = ("memory", "serial", "zmq+tcp", "zmq+ipc")


def make_pair(kind: str, folder: Path) -> Pair:
    if kind == "memory":
        return Pair(kind, *MemoryLink.pair())
    if kind == "serial":
        rig = open_link(f"pty://{folder}/tty", RIG)
        return Pair(kind, open_link(f"serial://{folder}/tty?baud=1000000", DAEMON), rig)
    rig = open_link("zmq+tcp://127.0.0.1:0" if kind == "zmq+tcp" else f"zmq+ipc://{folder}/s", RIG)
    return Pair(kind, open_link(rig.url, DAEMON), rig)


@pytest.fixture
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Short: Unix socket paths end at 107 bytes."""
    return tmp_path_factory.mktemp("l")


@pytest.fixture(params=KINDS)
def pair(request: pytest.FixtureRequest, folder: Path) -> Iterator[Pair]:
    """Both ends of each kind of link in turn, after the daemon's first frame."""
    both = make_pair(request.param, folder)
    both.introduce()
    yield both
    both.close()


@pytest.fixture
def serial_pair(folder: Path) -> Iterator[Pair]:
    both = make_pair("serial", folder)
    both.introduce()
    yield both
    both.close()


@pytest.fixture(params=["zmq+tcp", "zmq+ipc"])
def zmq_pair(request: pytest.FixtureRequest, folder: Path) -> Iterator[Pair]:
    both = make_pair(request.param, folder)
    both.introduce()
    yield both
    both.close()
