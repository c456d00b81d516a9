"""What leaves the rig: frames with the faults of the line, in order and in time; pure."""

from collections import deque
from collections.abc import Sequence
from random import Random

from drivers.codec import pack_frame
from drivers.messages import ANSWERS, Finished, Message, Samples, encode

SECOND_NS = 1_000_000_000
BLOCK_FAULTS = ("drop", "duplicate", "reorder", "corrupt", "late")
ANSWER_FAULTS = ("lost_answer", "double_answer", "corrupt_answer", "late_answer")


class Sender:
    """Packs messages and spoils what the faults of the trial say."""

    def __init__(self) -> None:
        self.session: int | None = None
        self.peer = 0
        self.silent_until_ns = 0
        self._ready: deque[tuple[bytes, int]] = deque()
        self._held: list[tuple[int, bytes, int]] = []
        self._left: dict[str, float] = {}
        self._overtaken: bytes | None = None
        """A sample block that the next one, or Finished, goes ahead of."""
        self._chance = Random(0)

    def arm(self, faults: dict[str, float], chance: Random) -> None:
        """The line's faults for the trial that begins."""
        self._overtaken = None
        kinds = (*BLOCK_FAULTS, *ANSWER_FAULTS)
        self._left = {kind: faults[kind] for kind in kinds if kind in faults}
        self._chance = chance

    def send(
        self, message: Message, now_ns: int, session: int | None = None, peer: int | None = None
    ) -> None:
        session = self.session if session is None else session
        if now_ns < self.silent_until_ns or session is None:
            return
        frame = pack_frame(session, 0, encode(message))
        to = self.peer if peer is None else peer
        frames = [frame]
        if isinstance(message, ANSWERS):
            frames = self._spoil_answer(frame, to, now_ns)
        if isinstance(message, Finished) and self._overtaken is not None:
            frames = [frame, self._overtaken]
            self._overtaken = None
        self._ready.extend((one, to) for one in frames)

    def _spoil_answer(self, frame: bytes, to: int, now_ns: int) -> list[bytes]:
        if "late_answer" in self._left:
            self._hold(frame, to, now_ns, self._left.pop("late_answer"))
            return []
        if self._use("lost_answer"):
            return []
        if self._use("double_answer"):
            return [frame, frame]
        return [self._hit(frame)] if self._use("corrupt_answer") else [frame]

    def _hold(self, frame: bytes, to: int, now_ns: int, seconds: float) -> None:
        self._held.append((now_ns + int(seconds * SECOND_NS), frame, to))

    def _hit(self, frame: bytes) -> bytes:
        """The frame with one wrong byte."""
        at = self._chance.randrange(len(frame))
        return frame[:at] + bytes([frame[at] ^ 0x5A]) + frame[at + 1 :]

    def send_blocks(self, blocks: Sequence[Samples], now_ns: int, spoil: bool) -> None:
        """Sample blocks; `spoil` is false for blocks that were asked for again."""
        if now_ns < self.silent_until_ns or self.session is None:
            return
        for block in blocks:
            frame = pack_frame(self.session, 0, encode(block))
            for spoiled in self._spoil(frame, now_ns) if spoil else [frame]:
                self._ready.append((spoiled, self.peer))

    def _spoil(self, frame: bytes, now_ns: int) -> list[bytes]:
        if "late" in self._left:
            self._hold(frame, self.peer, now_ns, self._left.pop("late"))
            return []
        if self._use("drop"):
            return []
        if self._use("duplicate"):
            return [frame, frame]
        if self._use("corrupt"):
            return [self._hit(frame)]
        if self._overtaken is None and self._use("reorder"):
            self._overtaken = frame
            return []
        before, self._overtaken = self._overtaken, None
        return [frame] if before is None else [frame, before]

    def _use(self, kind: str) -> bool:
        left = self._left.get(kind, 0)
        if left >= 1:
            self._left[kind] = left - 1
        return left >= 1

    def take(self, now_ns: int) -> list[tuple[bytes, int]]:
        """Frames to write now, each with its peer."""
        for held in [one for one in self._held if one[0] <= now_ns]:
            self._held.remove(held)
            self._ready.append(held[1:])
        frames = list(self._ready)
        self._ready.clear()
        return frames

    def next_wake_ns(self) -> int | None:
        return min((due_ns for due_ns, _, _ in self._held), default=None)

    def forget(self) -> None:
        self._ready.clear()
        self._held.clear()
        self._overtaken = None
