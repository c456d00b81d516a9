"""The rig's clock as the daemon sees it, by two-way time transfer (RFC 5905, section 8).

offset = ((t2 - t1) + (t3 - t4)) / 2, delay = (t4 - t1) - (t3 - t2); exchanges of least delay are
kept, because the error of an offset is at most half its delay. Whole nanoseconds and ticks, so
that days of running cost no precision.
"""

from collections import deque
from dataclasses import dataclass

KEPT_EXCHANGES = 64
"""Exchanges kept for the drift; with one a second that is a minute, and memory stays flat."""

NEAR_FLOOR = 1.5
"""Exchanges whose delay is at most this multiple of the least one take part in the drift fit."""

DRIFT_SPAN_NS = 10_000_000_000
"""Span of kept exchanges from which on a drift is estimated: below, jitter is all one sees."""

MAX_DRIFT = 500e-6
"""A crystal is within 100 ppm; a larger fitted drift is an error of the fit and is not used."""


@dataclass(frozen=True)
class Exchange:
    """One exchange: daemon send, rig receive, rig answer, daemon receive, all in ns."""

    sent_ns: int
    received_ns: int
    answered_ns: int
    returned_ns: int

    @property
    def offset_ns(self) -> float:
        """Rig clock minus daemon clock."""
        out = self.received_ns - self.sent_ns
        return (out + (self.answered_ns - self.returned_ns)) / 2

    @property
    def delay_ns(self) -> int:
        """Time on the way, both directions together."""
        return (self.returned_ns - self.sent_ns) - (self.answered_ns - self.received_ns)


class ClockSync:
    """Estimates the rig's tick for a time of the daemon's clock.

    A rig whose clock may jump (a simulator) gets no drift, and `restart` before each start.
    """

    def __init__(self, tick_hz: int, steps: bool = False) -> None:
        self._tick_hz = tick_hz
        self._steps = steps
        self._kept: deque[Exchange] = deque(maxlen=KEPT_EXCHANGES)
        self._fresh = 0

    @property
    def fresh(self) -> int:
        """Exchanges since the last `restart`."""
        return self._fresh

    @property
    def best(self) -> Exchange | None:
        """The kept exchange of least delay; the newest of equals."""
        return min(reversed(self._kept), key=lambda x: x.delay_ns, default=None)

    @property
    def uncertainty_s(self) -> float:
        """Half the least delay; infinite before the first exchange."""
        best = self.best
        return float("inf") if best is None else best.delay_ns / 2e9

    @property
    def drift(self) -> float:
        """Rig clock's rate minus one, by least squares over near-floor exchanges; 0 if unknown."""
        best = self.best
        if self._steps or best is None:
            return 0.0
        limit = max(best.delay_ns, 1) * NEAR_FLOOR
        good = [x for x in self._kept if x.delay_ns <= limit]
        if len(good) < 4 or good[-1].sent_ns - good[0].sent_ns < DRIFT_SPAN_NS:
            return 0.0
        slope = _slope(
            [(x.sent_ns - good[0].sent_ns, x.offset_ns - good[0].offset_ns) for x in good]
        )
        return slope if abs(slope) <= MAX_DRIFT else 0.0

    def restart(self) -> None:
        """Begin a fresh burst before a start; forgets all exchanges of a clock that may jump."""
        self._fresh = 0
        if self._steps:
            self._kept.clear()

    def add(self, sent_ns: int, received_tick: int, answered_tick: int, returned_ns: int) -> None:
        exchange = Exchange(
            sent_ns, self._to_ns(received_tick), self._to_ns(answered_tick), returned_ns
        )
        if exchange.delay_ns < 0:
            # The rig claims to have held the message for longer than it was away.
            return
        self._kept.append(exchange)
        self._fresh += 1

    def tick_at(self, now_ns: int) -> int:
        """The rig's tick at a time of the daemon's clock. Raises ValueError before any exchange."""
        best = self.best
        if best is None:
            raise ValueError("no clock exchange with the rig has succeeded yet")
        since = now_ns - best.sent_ns
        rig_ns = now_ns + round(best.offset_ns + self.drift * since)
        return rig_ns * self._tick_hz // 1_000_000_000

    def _to_ns(self, tick: int) -> int:
        return tick * 1_000_000_000 // self._tick_hz


def _slope(points: list[tuple[int, float]]) -> float:
    mean_x = sum(x for x, _ in points) / len(points)
    mean_y = sum(y for _, y in points) / len(points)
    spread = sum((x - mean_x) ** 2 for x, _ in points)
    return sum((x - mean_x) * (y - mean_y) for x, y in points) / spread
