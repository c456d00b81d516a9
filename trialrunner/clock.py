"""The daemon's clock, passed in everywhere so that tests can hold it."""

import time
from datetime import UTC, datetime
from typing import Protocol


class Clock(Protocol):
    def now_ns(self) -> int:
        """Monotonic nanoseconds; only differences mean anything."""

    def utc(self) -> str:
        """RFC 3339, UTC, microseconds; may step, so nothing is timed by it."""


class SystemClock:
    def now_ns(self) -> int:
        return time.monotonic_ns()

    def utc(self) -> str:
        return _stamp(datetime.now(UTC))


class ManualClock:
    """Stands still until told; the date follows the monotonic time from a fixed start."""

    def __init__(self, now_ns: int = 1_000_000_000) -> None:
        self._now_ns = now_ns

    def now_ns(self) -> int:
        return self._now_ns

    def utc(self) -> str:
        return _stamp(datetime.fromtimestamp(1_790_000_000 + self._now_ns / 1e9, UTC))

    def advance_to(self, now_ns: int) -> None:
        self._now_ns = max(self._now_ns, now_ns)


def _stamp(moment: datetime) -> str:
    return moment.isoformat(timespec="microseconds").replace("+00:00", "Z")
