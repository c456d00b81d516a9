"""What links over a file descriptor share: framing, a bounded queue, non-blocking I/O."""

import os
import time
from collections.abc import Callable

from drivers import limits
from drivers.errors import LinkLost
from drivers.framing import FrameSplitter, stuff
from drivers.link import Link, Received

READ_BYTES = 65536
READS_PER_CALL = 16
"""So much is taken in one call, so that a flood cannot hold the caller's loop."""

STALL_S = 5.0
"""A line that takes no byte for this long is broken, whatever the driver says."""

Clock = Callable[[], float]


class ByteLink(Link):
    """COBS frames over a raw file descriptor that someone else opened."""

    max_body = limits.MAX_SERIAL_BODY_BYTES
    block_bytes = limits.SERIAL_BLOCK_BYTES

    def __init__(self, url: str, fd: int, clock: Clock = time.monotonic) -> None:
        super().__init__()
        self.url = url
        self._fd = fd
        self._clock = clock
        max_frame = limits.HEADER_BYTES + self.max_body + limits.CRC_BYTES
        self._splitter = FrameSplitter(max_frame)
        self._out = bytearray()
        self._stalled_since: float | None = None
        os.set_blocking(fd, False)

    @property
    def pollable(self) -> int | None:
        return None if self._fd < 0 else self._fd

    @property
    def wants_write(self) -> bool:
        return bool(self._out)

    def send(self, frame: bytes, peer: int = 0) -> None:
        self._require_open()
        if len(self._out) > limits.MAX_BACKLOG_BYTES:
            self._on_backlog()
        self._out += stuff(frame)
        self._count_out(len(frame))

    def receive(self) -> list[Received]:
        self._require_open()
        frames: list[bytes] = []
        for _ in range(READS_PER_CALL):
            try:
                data = os.read(self._fd, READ_BYTES)
            except BlockingIOError:
                break
            except OSError as error:
                raise LinkLost(f"{self.url}: reading failed: {error.strerror}") from None
            if not data:
                raise LinkLost(f"{self.url}: the port was unplugged or closed by its other end")
            frames += self._splitter.feed(data)
        self._count_in(frames)
        self._errors.update(self._splitter.errors)
        self._splitter.errors.clear()
        return [Received(frame) for frame in frames]

    def flush(self) -> bool:
        self._require_open()
        while self._out:
            try:
                written = os.write(self._fd, self._out[:READ_BYTES])
            except BlockingIOError:
                self._note_stall()
                return False
            except OSError as error:
                raise LinkLost(f"{self.url}: writing failed: {error.strerror}") from None
            del self._out[:written]
            self._stalled_since = None
        return True

    def _note_stall(self) -> None:
        now = self._clock()
        if self._stalled_since is None:
            self._stalled_since = now
        elif now - self._stalled_since > STALL_S:
            self._on_stall()

    def _on_stall(self) -> None:
        raise LinkLost(f"{self.url}: the line took no byte for {STALL_S:g} s")

    def _on_backlog(self) -> None:
        raise LinkLost(
            f"{self.url}: {len(self._out)} bytes wait for a line that does not take them"
        )

    def _require_open(self) -> None:
        if self._fd < 0:
            raise LinkLost(f"{self.url}: the link is closed")
