"""The link and the conversation over it: opening, reading, writing, losing, opening again."""

from __future__ import annotations

from collections.abc import Callable
from typing import Protocol

from drivers.errors import LinkError
from drivers.link import Link
from trialrunner.clock import Clock
from trialrunner.conversation import Conversation
from trialrunner.conversation.events import Collected
from trialrunner.timers import Timers

RECONNECT_FIRST_S, RECONNECT_LAST_S = 0.2, 5.0
"""Pause before a lost link is opened again; doubled each time."""

BULK_PER_TURN = 64
"""Table blocks handed to the link in one turn of the loop, so that the turn stays short."""


class Owner(Protocol):
    """Who is told when the line breaks."""

    def line_lost(self, why: str) -> None: ...

    def line_trouble(self, why: str) -> None: ...


class RigLine:
    """One line to one rig, over as many sessions as it takes."""

    def __init__(
        self,
        open_link: Callable[[], Link],
        new_conversation: Callable[[Link], Conversation],
        clock: Clock,
        timers: Timers,
        owner: Owner,
    ) -> None:
        self._open_link = open_link
        self._new_conversation = new_conversation
        self._clock = clock
        self._timers = timers
        self._owner = owner
        self._pause_s = RECONNECT_FIRST_S
        self.link: Link | None = None
        self.conversation: Conversation | None = None

    @property
    def up(self) -> bool:
        """A session is open: the rig has greeted on this link."""
        talk = self.conversation
        return self.link is not None and talk is not None and talk.greeted is not None

    @property
    def talk(self) -> Conversation:
        """The conversation; only to be asked for after the first connect."""
        assert self.conversation is not None
        return self.conversation

    @property
    def wants_write(self) -> bool:
        return self.link is not None and self.link.wants_write

    def connect(self) -> None:
        """Open the link and greet. Raises LinkError the first time, tries again later on."""
        try:
            self.link = self._open_link()
        except LinkError as error:
            if self.conversation is None:
                raise
            self._owner.line_trouble(f"the link cannot be opened again: {error}")
            self.reconnect_later()
            return
        if self.conversation is None:
            self.conversation = self._new_conversation(self.link)
        self.conversation.connect(self._clock.now_ns())

    def reconnect_later(self) -> None:
        """Close what is left and try again after a pause that grows."""
        self.close()
        self._timers.start("connect", self._pause_s, self.connect)
        self._pause_s = min(2 * self._pause_s, RECONNECT_LAST_S)

    def greeted(self) -> None:
        """The rig answers again: the next loss starts with a short pause."""
        self._pause_s = RECONNECT_FIRST_S

    def read(self) -> None:
        """Take in what arrived and let the conversation's time pass."""
        if self.link is None or self.conversation is None:
            return
        now_ns = self._clock.now_ns()
        try:
            for frame in self.link.receive():
                self.conversation.receive(frame.data, now_ns)
        except LinkError as error:
            self.lose(str(error))
            return
        self.conversation.advance(now_ns)

    def write(self) -> None:
        """Urgent frames at once; table blocks only while the line is idle."""
        if self.link is None or self.conversation is None:
            return
        try:
            for frame in self.conversation.urgent():
                self.link.send(frame)
            for _ in range(BULK_PER_TURN):
                block = self.conversation.bulk() if self.link.flush() else None
                if block is None:
                    return
                self.link.send(block)
        except LinkError as error:
            self.lose(str(error))

    def lose(self, why: str) -> None:
        """The line broke or the rig fell silent: nothing more will come of this session."""
        self.close()
        self._owner.line_lost(why)

    def give_up_trial(self) -> Collected | None:
        return None if self.conversation is None else self.conversation.give_up_trial()

    def close(self) -> None:
        if self.link is not None:
            self.link.close()
            self.link = None
        if self.conversation is not None:
            self.conversation.greeted = None
