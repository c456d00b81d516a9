"""One poll over all that may wake the loop: link, operator, update job, signals."""

from __future__ import annotations

import os
from collections import deque
from typing import Any

import zmq

from trialrunner import operator_desk as desk
from trialrunner.operator_messages import OperatorRequest
from trialrunner.operator_socket import OperatorSocket
from trialrunner.session import Session
from trialrunner.telemetry import Publisher
from trialrunner.timers import SECOND_NS

LONGEST_WAIT_NS = SECOND_NS
STATUS_EVERY_NS = SECOND_NS


class Waker:
    """Lets another thread or a signal handler end the poll: a pipe, written without blocking."""

    def __init__(self) -> None:
        self.read_fd, self._write_fd = os.pipe()
        os.set_blocking(self.read_fd, False)
        os.set_blocking(self._write_fd, False)
        self.signals: deque[int] = deque()

    def wake(self) -> None:
        try:
            os.write(self._write_fd, b"\0")
        except BlockingIOError:
            # The pipe is full of wake-ups already.
            return

    def on_signal(self, number: int, _: Any) -> None:
        self.signals.append(number)
        self.wake()

    def drain(self) -> None:
        try:
            while os.read(self.read_fd, 4096):
                pass
        except BlockingIOError:
            return

    def close(self) -> None:
        os.close(self.read_fd)
        os.close(self._write_fd)


class Daemon:
    """Runs a session with its operator's sockets until it is over."""

    def __init__(
        self, session: Session, operator: OperatorSocket, publisher: Publisher, waker: Waker
    ) -> None:
        self.session = session
        self._operator = operator
        self._publisher = publisher
        self._waker = waker
        self._poller = zmq.Poller()
        self._poller.register(waker.read_fd, zmq.POLLIN)
        self._poller.register(operator.socket, zmq.POLLIN)
        self._poller.register(publisher.socket, zmq.POLLIN)
        self._polled: Any = None
        self._status_due_ns = 0

    def run(self) -> None:
        """Until the session is finished. What goes wrong here leaves the rig safe first."""
        try:
            while not self.session.finished:
                self._wait()
                self.turn()
        except Exception as error:
            self.session.abandon(f"the daemon gave up: {error}")
            raise

    def turn(self) -> None:
        """One pass over everything that is due."""
        self._waker.drain()
        while self._waker.signals:
            name = "SIGTERM" if self._waker.signals.popleft() == 15 else "SIGINT"
            self.session.request_stop(name)
        for handle, request in self._operator.receive():
            self._operator.answer(handle, self._serve(request))
        self.session.turn()
        self._publisher.serve_subscriptions()
        self._publish_status()

    def _serve(self, request: OperatorRequest) -> Any:
        session = self.session
        ruling = desk.rule(request, session)
        data = session.observer.current() if request.verb == "status" else {}
        reply = desk.answer(request, ruling, session.clock.utc(), data)
        if request.verb != "status":
            session.carry_out(request, ruling, reply)
        return reply

    def _publish_status(self) -> None:
        """At least once a second, so that a watcher can tell a live daemon from a dead one."""
        now_ns = self.session.clock.now_ns()
        if now_ns >= self._status_due_ns:
            self._status_due_ns = now_ns + STATUS_EVERY_NS
            self.session.tell_link()
            self.session.observer.publish_status()

    def _wait(self) -> None:
        self._register_link()
        now_ns = self.session.clock.now_ns()
        due_ns = min(self.session.next_wake_ns(), now_ns + LONGEST_WAIT_NS, self._status_due_ns)
        # Rounded up: a poll that ends a little early would spin until the time has come.
        timeout_ms = max(0, -((now_ns - due_ns) // 1_000_000))
        self._poller.poll(timeout_ms)

    def _register_link(self) -> None:
        """The link comes and goes; output is polled only while something waits to be written."""
        link = self.session.line.link
        pollable = None if link is None else link.pollable
        if self._polled is not None and self._polled is not pollable:
            self._poller.unregister(self._polled)
            self._polled = None
        if pollable is not None and link is not None:
            wanted = zmq.POLLIN | (zmq.POLLOUT if link.wants_write else 0)
            self._poller.register(pollable, wanted)
            self._polled = pollable
