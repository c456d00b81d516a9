"""Tries the link of a configuration: greets the rig, compares, exchanges clocks, says goodbye.

Nothing moves: no table is sent and nothing is armed.
"""

import secrets
from collections.abc import Callable, Mapping
from dataclasses import dataclass

import zmq

from drivers.link import Link
from drivers.messages import Channel, Greeting
from drivers.open import open_link
from trialrunner.agreement import LimitsInForce, agree, limits_in_force
from trialrunner.clock import Clock, SystemClock
from trialrunner.config import Config
from trialrunner.conversation import Conversation
from trialrunner.conversation import events as rig
from trialrunner.core.clock_sync import Exchange
from trialrunner.locks import hold_lock, link_lock_path
from trialrunner.runtime_dir import make_private_dir

EXCHANGES = 8
"""Clock exchanges whose best one is reported."""

PATIENCE_NS = 30_000_000_000
"""A rig that answers each message and never gets done is given up."""


STRAY = {"session", "before greeting", "stale answer", "stale pong"}
"""Kinds of frames that were sound and only came at the wrong time."""


class LinkCheckFailed(Exception):
    """The link opened and the rig could not be talked to; the text says what it did."""


@dataclass(frozen=True)
class LinkFinding:
    """What the rig said of itself, and what of it does not fit."""

    greeting: Greeting
    inputs: tuple[Channel, ...]
    outputs: tuple[Channel, ...]
    auxiliary: tuple[Channel, ...]
    disagreements: tuple[str, ...]
    limits: LimitsInForce | None
    """None where the rig disagrees."""
    exchange: Exchange
    """The clock exchange of least delay."""
    bad_frames: Mapping[str, int]
    """Frames and messages that were damaged, by kind."""


def try_link(
    config: Config,
    clock: Clock | None = None,
    opened: Callable[[str], Link] = open_link,
    pause: Callable[[Link, int], None] | None = None,
) -> LinkFinding:
    """Greet the rig of a configuration and compare.

    `pause(link, ns)` waits until the link has something or the time is over; a poll by default.
    Raises Busy while a daemon holds the link, NotPrivate, LinkError, LinkCheckFailed.
    """
    url = config.link.url
    lock = link_lock_path(url)
    make_private_dir(lock.parent)
    with hold_lock(lock, f"the link {url}"):
        link = opened(url)
        try:
            return _Check(config, clock or SystemClock(), link, pause or poll).run()
        finally:
            link.close()


def poll(link: Link, at_most_ns: int) -> None:
    """Wait for the link; rounded up, because an early end would only spin."""
    poller = zmq.Poller()
    poller.register(link.pollable, zmq.POLLIN | (zmq.POLLOUT if link.wants_write else 0))
    poller.poll(max(0, -(-at_most_ns // 1_000_000)))


class _Check:
    def __init__(
        self, config: Config, clock: Clock, link: Link, pause: Callable[[Link, int], None]
    ) -> None:
        self._pause = pause
        self._config = config
        self._clock = clock
        self._link = link
        self._talk = Conversation(
            config.link, config.run.name, _session_id, link.max_body, link.block_bytes
        )
        self._best: Exchange | None = None
        self._exchanges = 0
        self._closing = False
        self._done = False

    def run(self) -> LinkFinding:
        start_ns = self._clock.now_ns()
        self._talk.connect(start_ns)
        while not self._done:
            self._turn()
            if self._clock.now_ns() - start_ns > PATIENCE_NS:
                raise LinkCheckFailed(self._trouble())
        return self._finding()

    def _turn(self) -> None:
        for frame in self._link.receive():
            self._talk.receive(frame.data, self._clock.now_ns())
        self._talk.advance(self._clock.now_ns())
        while self._talk.events:
            self._on_event(self._talk.events.popleft())
        if self._talk.greeted is not None and not self._closing:
            self._exchange_clocks()
        for data in self._talk.urgent():
            self._link.send(data)
        self._link.flush()
        if not self._done:
            self._pause(self._link, self._talk.next_wake_ns() - self._clock.now_ns())

    def _trouble(self) -> str:
        patience_s = PATIENCE_NS / 1e9
        if self._talk.greeted is not None and self._best is None:
            return f"the rig greets and answers no clock exchange within {patience_s:g} s"
        return f"the rig talks and does not get done within {patience_s:g} s"

    def _on_event(self, event: rig.RigEvent) -> None:
        match event:
            case rig.RigRefused():
                raise LinkCheckFailed(f"the rig refuses {event.order}: {event.text}")
            case rig.RigSilent() if not self._closing:
                raise LinkCheckFailed(event.text)
            case rig.SessionClosed() | rig.RigSilent():
                self._done = True

    def _exchange_clocks(self) -> None:
        """One exchange after the other; a clock that jumps keeps none but the last."""
        if self._talk.clock.fresh == 0 and self._exchanges:
            return
        best = self._talk.clock.best
        if best is not None and (self._best is None or best.delay_ns < self._best.delay_ns):
            self._best = best
        if self._exchanges == EXCHANGES:
            self._closing = True
            self._talk.close()
        else:
            self._exchanges += 1
            self._talk.begin_clock_burst()

    def _finding(self) -> LinkFinding:
        greeted = self._talk.greeted
        assert greeted is not None
        assert self._best is not None
        channels = (*greeted.inputs, *greeted.outputs, *greeted.auxiliary)
        disagreements = agree(self._config, greeted.greeting, channels)
        return LinkFinding(
            greeting=greeted.greeting,
            inputs=greeted.inputs,
            outputs=greeted.outputs,
            auxiliary=greeted.auxiliary,
            disagreements=tuple(disagreements),
            limits=None if disagreements else limits_in_force(self._config, channels),
            exchange=self._best,
            bad_frames=self._damage(),
        )

    def _damage(self) -> dict[str, int]:
        """What the line did; strays of an older session are none of its doing."""
        counts = {**self._link.statistics().errors, **self._talk.errors}
        return {kind: n for kind, n in counts.items() if kind not in STRAY and n}


def _session_id() -> int:
    return secrets.randbelow(2**32 - 1) + 1
