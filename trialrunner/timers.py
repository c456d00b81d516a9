"""Named deadlines on the daemon's clock; one of a name at a time."""

from collections.abc import Callable

from trialrunner.clock import Clock

SECOND_NS = 1_000_000_000


class Timers:
    def __init__(self, clock: Clock) -> None:
        self._clock = clock
        self._due: dict[str, tuple[int, Callable[[], None]]] = {}

    def start(self, name: str, delay_s: float, call: Callable[[], None]) -> None:
        """Call once after a delay; replaces a timer of the same name."""
        self._due[name] = (self._clock.now_ns() + int(delay_s * SECOND_NS), call)

    def cancel(self, *names: str) -> None:
        for name in names:
            self._due.pop(name, None)

    def clear(self) -> None:
        self._due.clear()

    def next_ns(self) -> int | None:
        return min((due_ns for due_ns, _ in self._due.values()), default=None)

    def run_due(self) -> None:
        """Run what is due now; a timer that an earlier one cancelled or replaced is not run."""
        now_ns = self._clock.now_ns()
        for name, entry in list(self._due.items()):
            if entry[0] <= now_ns and self._due.get(name) is entry:
                del self._due[name]
                entry[1]()
