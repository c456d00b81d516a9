"""The daemon's command socket: bad frames are answered here, each good request comes out once.

It never blocks and reads a bounded amount a call; the loop that owns it decides what a request
means (OPERATOR.md says what clients see).
"""

from collections import OrderedDict
from collections.abc import Callable
from contextlib import ExitStack, closing
from dataclasses import dataclass
from typing import Any

import zmq

from trialrunner.clock import Clock, SystemClock
from trialrunner.local_address import bind_private, sole_owner
from trialrunner.operator_messages import (
    MAX_FRAME_BYTES,
    BadMessage,
    OperatorAnswer,
    OperatorRequest,
    parse_request,
)

MAX_PER_CALL = 64
"""Messages read by one `receive`, so that a flood cannot hold up the loop; 64 take about 2 ms."""
MAX_JOURNAL = 1_000
"""Answers kept for repeated requests, 2 to 4 KB each; older ones are asked of the record."""
MAX_QUEUED = 100
"""Messages that ZeroMQ keeps for each client and direction."""

LINGER_MS = 500
"""After closing, for the last answer."""
HANDSHAKE_MS = 2_000
HEARTBEAT_MS = 1_000
DEAD_AFTER_MS = 3_000
"""Without a heartbeat a client is dropped, and what is queued for it."""

Known = Callable[[str], OperatorAnswer | None]
"""The answer on record to the request of an id, if there is one."""


@dataclass(frozen=True)
class Handle:
    """Where an answer goes."""

    peer: bytes
    delimited: bool
    """The client sent an empty frame before its request, as REQ sockets do, and expects one."""
    id: str = ""


@dataclass
class OperatorCounts:
    """What came in since the start; for logs and telemetry."""

    requests: int = 0
    """Good ones, handed on."""
    repeated: int = 0
    """Seen before, answered from the journal or the record, not handed on."""
    refused: int = 0
    """Not understood, and answered so."""
    undeliverable: int = 0
    """Answers whose client was gone or did not read."""


@dataclass
class _Entry:
    request: OperatorRequest
    handle: Handle
    answer: OperatorAnswer | None = None


class OperatorSocket:
    """ROUTER socket for requests, held alone."""

    def __init__(
        self,
        context: "zmq.Context[Any]",
        url: str,
        known: Known = lambda id: None,
        clock: Clock | None = None,
    ) -> None:
        """Raises Busy, AddressError, NotPrivate, OSError; each text says what to do."""
        self.counts = OperatorCounts()
        self._known = known
        self._clock = clock or SystemClock()
        self._journal: OrderedDict[str, _Entry] = OrderedDict()
        with ExitStack() as stack:
            stack.enter_context(sole_owner(url))
            self.socket: zmq.Socket[Any] = context.socket(zmq.ROUTER)
            stack.enter_context(closing(self.socket))
            guard_socket(self.socket, MAX_FRAME_BYTES)
            self.socket.set(zmq.ROUTER_MANDATORY, 1)
            bind_private(self.socket, url)
            self.url: str = self.socket.get_string(zmq.LAST_ENDPOINT)
            self._stack = stack.pop_all()

    def close(self) -> None:
        """Give the address back; a last answer still goes out."""
        self._stack.close()

    def receive(self) -> list[tuple[Handle, OperatorRequest]]:
        """Requests that nobody has seen before, at most MAX_PER_CALL; each wants an `answer`."""
        found = []
        for _ in range(MAX_PER_CALL):
            message = self._read()
            if message is None:
                break
            handle, frame, extra = message
            try:
                if extra:
                    raise BadMessage(f"expected one frame, found {extra + 1}")
                request = parse_request(frame)
                handle = Handle(handle.peer, handle.delimited, request.id)
                if self._is_new(handle, request):
                    self.counts.requests += 1
                    found.append((handle, request))
            except BadMessage as error:
                self._refuse(handle, error)
        return found

    def answer(self, handle: Handle, answer: OperatorAnswer) -> None:
        """Answer a request that `receive` gave out, wherever its client is now."""
        entry = self._journal.get(handle.id)
        if entry is not None and entry.answer is None:
            entry.answer = answer
            handle = entry.handle
        self._send(handle, answer)

    def _read(self) -> tuple[Handle, bytes, int] | None:
        """Sender, body and count of superfluous frames of the next message; None if none is in."""
        try:
            part = self.socket.recv(zmq.NOBLOCK, copy=False)
        except zmq.Again:
            return None
        peer, frames, count = part.bytes, [b"", b""], 0
        while part.more:
            # One at a time and all but two dropped: a message may have a million frames.
            part = self.socket.recv(zmq.NOBLOCK, copy=False)
            if count < len(frames):
                frames[count] = part.bytes
            count += 1
        delimited = count > 1 and not frames[0]
        return Handle(peer, delimited), frames[delimited], max(0, count - 1 - delimited)

    def _is_new(self, handle: Handle, request: OperatorRequest) -> bool:
        """True if the request is to be handed on. Raises BadMessage."""
        if request.verb == "status":
            # Changes nothing: a repeat is answered afresh, and none pushes others out.
            return True
        entry = self._journal.get(request.id)
        if entry is None:
            return self._is_unknown(handle, request)
        if entry.request != request:
            raise BadMessage("id: used before for another request; make a new one", request.id)
        self.counts.repeated += 1
        entry.handle = handle
        if entry.answer is not None:
            self._send(handle, entry.answer)
        return False

    def _is_unknown(self, handle: Handle, request: OperatorRequest) -> bool:
        """The journal lacks it, because it is new or older than the journal goes back."""
        on_record = self._known(request.id)
        if on_record is not None:
            self.counts.repeated += 1
            self._send(handle, on_record)
            return False
        if len(self._journal) >= MAX_JOURNAL and not self._forget_one():
            raise BadMessage("too many requests wait for an answer; ask again later", request.id)
        self._journal[request.id] = _Entry(request, handle)
        return True

    def _forget_one(self) -> bool:
        """Drop the oldest entry that is answered; False if all still wait."""
        for id_, entry in self._journal.items():
            if entry.answer is not None:
                del self._journal[id_]
                return True
        return False

    def _refuse(self, handle: Handle, error: BadMessage) -> None:
        self.counts.refused += 1
        self._send(handle, OperatorAnswer(error.id, False, str(error), None, self._clock.utc()))

    def _send(self, handle: Handle, answer: OperatorAnswer) -> None:
        delimiter = [b""] if handle.delimited else []
        frames = [handle.peer, *delimiter, answer.to_json().encode()]
        try:
            self.socket.send_multipart(frames, zmq.NOBLOCK)
        except zmq.ZMQError:
            # The client left or does not read (EHOSTUNREACH, EAGAIN). It may ask again.
            self.counts.undeliverable += 1


def guard_socket(socket: "zmq.Socket[Any]", max_frame_bytes: int) -> None:
    """Options of a socket that others connect to: all queues bounded, dead peers dropped."""
    socket.set(zmq.MAXMSGSIZE, max_frame_bytes)
    socket.set(zmq.RCVHWM, MAX_QUEUED)
    socket.set(zmq.SNDHWM, MAX_QUEUED)
    socket.set(zmq.LINGER, LINGER_MS)
    socket.set(zmq.HANDSHAKE_IVL, HANDSHAKE_MS)
    socket.set(zmq.HEARTBEAT_IVL, HEARTBEAT_MS)
    socket.set(zmq.HEARTBEAT_TIMEOUT, DEAD_AFTER_MS)
