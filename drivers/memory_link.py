"""Two ends in one thread, for tests: ordered, with faults on demand."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Iterable

from drivers import limits
from drivers.errors import LinkLost
from drivers.link import Link, Received

MAX_HELD_BYTES = 64 << 20
"""What waits for a reader that does not read before the line counts as broken; as much as ZeroMQ
and the system hold for one of its links."""

Fault = Callable[[bytes], Iterable[bytes]]
"""What arrives of a frame: nothing (lost), the frame twice, other bytes..."""


class MemoryLink(Link):
    """One end of a pair; `fault` changes what this end sends."""

    max_body = limits.MAX_MESSAGE_BODY_BYTES
    block_bytes = limits.MESSAGE_BLOCK_BYTES

    def __init__(self, name: str) -> None:
        super().__init__()
        self.url = f"memory://{name}"
        self.fault: Fault = lambda frame: (frame,)
        self._inbox: deque[bytes] = deque()
        self._held_bytes = 0
        self._other: MemoryLink | None = None

    @classmethod
    def pair(cls) -> tuple[MemoryLink, MemoryLink]:
        """The daemon's end and the rig's end."""
        one, two = cls("daemon"), cls("rig")
        one._other, two._other = two, one
        return one, two

    @property
    def pollable(self) -> None:
        return None

    @property
    def wants_write(self) -> bool:
        return False

    def send(self, frame: bytes, peer: int = 0) -> None:
        other = self._require_open()
        self._count_out(len(frame))
        if other._held_bytes > MAX_HELD_BYTES:
            raise LinkLost(f"{self.url}: the other end does not read")
        for arriving in self.fault(frame):
            other._inbox.append(arriving)
            other._held_bytes += len(arriving)

    def receive(self) -> list[Received]:
        self._require_open()
        frames = list(self._inbox)
        self._inbox.clear()
        self._held_bytes = 0
        self._count_in(frames)
        return [Received(frame) for frame in frames]

    def flush(self) -> bool:
        self._require_open()
        return True

    def cut(self) -> None:
        """Both ends find the line broken."""
        if self._other is not None:
            self._other._other = None
        self._other = None

    def close(self) -> None:
        self.cut()

    def _require_open(self) -> MemoryLink:
        if self._other is None:
            raise LinkLost(f"{self.url}: the line is cut")
        return self._other
