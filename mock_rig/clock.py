"""The rig's own clock: the host's, or one that jumps ahead instead of waiting; pure."""

SECOND_NS = 1_000_000_000


class RigClock:
    def __init__(self, tick_hz: int, fast: bool) -> None:
        self._tick_hz = tick_hz
        self.fast = fast
        self._jumped_ns = 0

    def tick(self, now_ns: int) -> int:
        return (now_ns + self._jumped_ns) * self._tick_hz // SECOND_NS

    def jump_to(self, tick: int, now_ns: int) -> None:
        """Go ahead to a tick; a clock never goes back."""
        there_ns = -(-tick * SECOND_NS // self._tick_hz)
        self._jumped_ns = max(self._jumped_ns, there_ns - now_ns)

    def wall_ns(self, tick: int) -> int:
        """The host's time at which a tick comes, if nothing jumps before."""
        return -(-tick * SECOND_NS // self._tick_hz) - self._jumped_ns
