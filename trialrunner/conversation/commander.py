"""Numbered messages, one at a time: sent again until answered, each carried out once.

The number of the message under way is never given to another one, also when the queue is
dropped: the rig may have carried it out and only its answer was lost.
"""

from collections import deque
from collections.abc import Callable

from drivers.messages import Message

OnAnswer = Callable[[Message], None]

FIRST_NUMBER = 1


class Commander:
    """The stop-and-wait queue of one session."""

    def __init__(self, answer_timeout_ns: int, max_tries: int) -> None:
        self._timeout_ns = answer_timeout_ns
        self._max_tries = max_tries
        self._queue: deque[tuple[Message, OnAnswer]] = deque()
        self._under_way: tuple[Message, OnAnswer] | None = None
        self._number = FIRST_NUMBER - 1
        self._tries = 0
        self._again_ns = 0

    def restart(self) -> None:
        """A new session: the next message is number 1."""
        self._queue.clear()
        self._under_way = None
        self._number = FIRST_NUMBER - 1

    def ask(self, message: Message, on_answer: OnAnswer) -> None:
        self._queue.append((message, on_answer))

    def drop_queue(self) -> None:
        """Forget what was not sent yet, and what was to follow from the message under way."""
        self._queue.clear()
        if self._under_way is not None:
            self._under_way = (self._under_way[0], _ignore)

    def exhausted(self, now_ns: int) -> bool:
        """The message under way was sent max_tries times and the last time went unanswered too."""
        overdue = self._under_way is not None and now_ns >= self._again_ns
        return overdue and self._tries >= self._max_tries

    @property
    def under_way(self) -> str:
        return "" if self._under_way is None else type(self._under_way[0]).__name__

    def due(self, now_ns: int) -> tuple[Message, int] | None:
        """The message to send now and its number, if any."""
        if self._under_way is None:
            if not self._queue:
                return None
            self._under_way = self._queue.popleft()
            self._number += 1
            self._tries = 0
        elif now_ns < self._again_ns:
            return None
        self._tries += 1
        self._again_ns = now_ns + self._timeout_ns
        return self._under_way[0], self._number

    def next_wake_ns(self) -> int | None:
        return self._again_ns if self._under_way is not None else None

    def answered(self, number: int, answer: Message) -> bool:
        """Hand on an answer; false for one that nobody waits for (a repeated answer)."""
        if self._under_way is None or number != self._number:
            return False
        _, on_answer = self._under_way
        self._under_way = None
        on_answer(answer)
        return True


def _ignore(_: Message) -> None:
    """An answer to an order that no longer matters."""
