"""The contract of a link: whole frames in and out, never blocking; one file for each kind."""

from abc import ABC, abstractmethod
from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, NamedTuple


class Received(NamedTuple):
    """One frame as it came: unstuffed, not verified."""

    data: bytes
    peer: int = 0
    """Who sent it, where a link can have several peers; else 0."""


@dataclass(frozen=True)
class LinkStatistics:
    """A snapshot of a link's counters since it was opened."""

    bytes_in: int = 0
    bytes_out: int = 0
    frames_in: int = 0
    frames_out: int = 0
    errors: Mapping[str, int] = field(default_factory=dict)
    """Frames lost or refused by kind."""


class Link(ABC):
    """A way to the peer. Every error that leaves it is a LinkError."""

    url: str
    max_body: int
    """Largest message body that one frame carries."""
    block_bytes: int
    """Bytes of samples to put into one block."""

    def __init__(self) -> None:
        self._counts: Counter[str] = Counter()
        self._errors: Counter[str] = Counter()

    @property
    @abstractmethod
    def pollable(self) -> Any:
        """What to register with a zmq.Poller: a file descriptor or socket; None if nothing."""

    @abstractmethod
    def send(self, frame: bytes, peer: int = 0) -> None:
        """Queue one whole frame. Raises LinkLost if the line is down or the queue overflows."""

    @abstractmethod
    def receive(self) -> list[Received]:
        """What has arrived, in order. Raises LinkLost if the peer or the port has gone."""

    @abstractmethod
    def flush(self) -> bool:
        """Write what the line takes now; true when nothing is left. Raises LinkLost."""

    @property
    @abstractmethod
    def wants_write(self) -> bool:
        """Frames wait for the line."""

    @abstractmethod
    def close(self) -> None:
        """Give the port or address back; harmless when repeated."""

    def describe(self) -> str:
        """What was obtained when the link was opened, for people."""
        return self.url

    def statistics(self) -> LinkStatistics:
        counts = self._counts
        return LinkStatistics(
            counts["bytes in"],
            counts["bytes out"],
            counts["frames in"],
            counts["frames out"],
            dict(self._errors),
        )

    def _count_in(self, frames: list[bytes]) -> None:
        self._counts["frames in"] += len(frames)
        self._counts["bytes in"] += sum(map(len, frames))

    def _count_out(self, n_bytes: int, n_frames: int = 1) -> None:
        self._counts["frames out"] += n_frames
        self._counts["bytes out"] += n_bytes
