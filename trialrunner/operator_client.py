"""Asks a daemon something and waits for its answer; asks again, with the same id, if none comes."""

import math
import os
import time
from types import TracebackType
from typing import Any

import zmq

from trialrunner.operator_messages import (
    MAX_ANSWER_BYTES,
    BadMessage,
    NoAnswer,
    OperatorAnswer,
    OperatorRequest,
    parse_answer,
)
from trialrunner.runtime_dir import is_listening

RETRY_S = 1.0
"""Without an answer for this long, the request is sent again over a new connection."""


class BadAddress(ValueError):
    """ZeroMQ cannot connect to such an address."""


def new_id() -> str:
    """An id for a request that nobody else makes."""
    return os.urandom(16).hex()


class OperatorClient:
    """One address to ask. DEALER, so that a lost answer locks nothing up."""

    def __init__(self, url: str, retry_s: float = RETRY_S) -> None:
        """Raises BadAddress."""
        self.url = url
        self._retry_s = retry_s
        self._context: zmq.Context[Any] = zmq.Context()
        try:
            self._socket = self._connected()
        except zmq.ZMQError as error:
            self._context.term()
            raise BadAddress(
                f"{url}: {error.strerror}; expected ipc:///path or tcp://host:port"
            ) from None

    def __enter__(self) -> "OperatorClient":
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        self._socket.close()
        self._context.term()

    def ask(self, request: OperatorRequest, timeout_s: float = 5.0) -> OperatorAnswer:
        """Send, wait, send again; the daemon applies a request once however often it arrives.

        Raises NoAnswer, BadMessage if what answers is no daemon.
        """
        self._require_listener()
        deadline_s = time.monotonic() + timeout_s
        self._send(request)
        while True:
            left_s = deadline_s - time.monotonic()
            answer = self._wait(request.id, min(self._retry_s, left_s))
            if answer is not None:
                return answer
            if left_s <= self._retry_s:
                raise NoAnswer(
                    f"{self.url}: no answer within {timeout_s:g} s. The request may still take "
                    "effect. If the daemon is stopped (Ctrl-Z, a debugger), let it go on; if it "
                    "hangs, use the rig's own stop, then end the process."
                )
            self._socket.close()
            self._socket = self._connected()
            self._send(request)

    def _wait(self, id_: str, longest_s: float) -> OperatorAnswer | None:
        """The answer to the request of that id; late ones to others are passed over."""
        until_s = time.monotonic() + longest_s
        while self._socket.poll(max(0, math.ceil((until_s - time.monotonic()) * 1000))):
            frames = self._socket.recv_multipart()
            answer = parse_answer(frames[-1])
            if answer.id == id_:
                return answer
            if not answer.id and not answer.ok:
                raise BadMessage(f"the daemon does not understand this program: {answer.text}")
        return None

    def _send(self, request: OperatorRequest) -> None:
        self._socket.send(request.to_json().encode(), zmq.NOBLOCK)

    def _connected(self) -> "zmq.Socket[Any]":
        socket: zmq.Socket[Any] = self._context.socket(zmq.DEALER)
        try:
            socket.set(zmq.LINGER, 0)
            socket.set(zmq.MAXMSGSIZE, MAX_ANSWER_BYTES)
            socket.set(zmq.IPV6, int(self.url.startswith("tcp://[")))
            socket.connect(self.url)
        except zmq.ZMQError:
            socket.close()
            raise
        return socket

    def _require_listener(self) -> None:
        """Say at once what ZeroMQ would wait for in silence: nobody is there."""
        path = self.url.removeprefix("ipc://")
        if path == self.url or is_listening(path):
            return
        found = "its daemon is gone" if os.path.exists(path) else "there is no such socket"
        raise NoAnswer(
            f"{self.url}: {found}. Start one with `trialrunner run CONFIG`; if one runs, name its "
            "run by --run, its configuration by --config, or its address by --url."
        )
