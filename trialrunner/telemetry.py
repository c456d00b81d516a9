"""The daemon's telemetry: what happens, for whoever listens; losing it is allowed, waiting is not.

Each message is one frame, `topic NUL JSON`, numbered within its topic so that a loss is seen. The
last message of each topic goes out again when somebody subscribes to it. OPERATOR.md describes it.
"""

from collections.abc import Mapping
from contextlib import ExitStack, closing
from typing import Any

import zmq

from trialrunner.clock import Clock, SystemClock
from trialrunner.local_address import bind_private, sole_owner
from trialrunner.operator_messages import json_text
from trialrunner.operator_socket import guard_socket

VERSION = 1

TOPICS: Mapping[str, str] = {
    "status": "the status of the run: at each change of state, and once a second",
    "trial": "one judged trial: its error norm, what was decided, and why",
    "verdict": "a guard that said more than pass of a trial",
    "event": "what else happened: the rig greeted, the link broke, the run halted",
    "health": "how far the trial under way is",
    "trace": "error and feedforward of the last trial, thinned for a screen",
}
"""Topics with what they carry. None begins with another's name, so that a prefix is a choice."""

MAX_SUBSCRIPTION_BYTES = 256
MAX_PER_CALL = 100
"""Subscriptions served by one call."""


class Publisher:
    """XPUB socket, held alone; sends at once or drops, and never blocks."""

    def __init__(self, context: "zmq.Context[Any]", url: str, clock: Clock | None = None) -> None:
        """Raises Busy, AddressError, NotPrivate, OSError; each text says what to do."""
        self._clock = clock or SystemClock()
        self._since = self._clock.utc()
        self._sequence = dict.fromkeys(TOPICS, 0)
        self._last: dict[str, bytes] = {}
        with ExitStack() as stack:
            stack.enter_context(sole_owner(url))
            self.socket: zmq.Socket[Any] = context.socket(zmq.XPUB)
            stack.enter_context(closing(self.socket))
            guard_socket(self.socket, MAX_SUBSCRIPTION_BYTES)
            # Without it a second subscriber to the same topic would go unnoticed.
            self.socket.set(zmq.XPUB_VERBOSE, 1)
            bind_private(self.socket, url)
            self.url: str = self.socket.get_string(zmq.LAST_ENDPOINT)
            self._stack = stack.pop_all()

    def close(self) -> None:
        """Give the address back; the last messages still go out."""
        self._stack.close()

    def publish(self, topic: str, values: Mapping[str, Any]) -> None:
        """Send `values` to all who want the topic; a subscriber that does not read loses it."""
        self._sequence[topic] += 1
        message = {
            "version": VERSION,
            "since": self._since,
            "sequence": self._sequence[topic],
            "at": self._clock.utc(),
            "data": values,
        }
        self._last[topic] = f"{topic}\0{json_text(message)}".encode()
        self._send(self._last[topic])

    def serve_subscriptions(self) -> None:
        """Send the last values that new subscribers ask for."""
        wanted: set[str] = set()
        for _ in range(MAX_PER_CALL):
            try:
                news = self._read()
            except zmq.Again:
                break
            if news[:1] == b"\x01":
                wanted |= {topic for topic, last in self._last.items() if last.startswith(news[1:])}
        for topic in TOPICS:
            if topic in wanted:
                self._send(self._last[topic])

    def _read(self) -> bytes:
        """The next (un)subscription; empty for what is none. Raises zmq.Again if none is in."""
        part = self.socket.recv(zmq.NOBLOCK, copy=False)
        if not part.more:
            return part.bytes
        while part.more:
            part = self.socket.recv(zmq.NOBLOCK, copy=False)
        return b""

    def _send(self, frame: bytes) -> None:
        # XPUB drops for each subscriber that is full, so this cannot wait; NOBLOCK makes it sure.
        self.socket.send(frame, zmq.NOBLOCK)
