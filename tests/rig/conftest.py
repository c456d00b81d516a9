"""A daemon by hand: speaks to the mock rig frame by frame, on a clock that the test moves."""

import random

import numpy as np
import pytest

from drivers.codec import pack_frame, unpack_frame
from drivers.messages import (
    ANSWERS,
    NUMBERED,
    Alive,
    Arm,
    Armed,
    Finished,
    Greeting,
    Heartbeat,
    Hello,
    RigState,
    Samples,
    Start,
    Table,
    TableBlock,
    TableClose,
    TableOpen,
    TableState,
    decode,
    encode,
)
from drivers.tables import table_crc
from mock_rig.faults import FaultScript
from mock_rig.options import RigOptions
from mock_rig.plant import ChannelInfo
from mock_rig.responder import Responder

MAX_BODY = 131072
MS = 1_000_000


class LinePlant:
    """A first-order plant, quick to compute."""

    name = "line"
    period_ticks = 1_000
    inject = "actuator"
    return_s = 0.2
    inputs = (ChannelInfo("force", "N", -10.0, 10.0, 2000.0),)
    outputs = (ChannelInfo("position", "m", -5.0, 5.0),)
    auxiliary = (ChannelInfo("warmth", "Cel", 0.0, 100.0),)

    def begin(self, trial, reference0, disturbance):
        self.chance = random.Random(trial)
        self.effect = disturbance
        self.position = reference0[0] + sum(disturbance.offset[:1])
        return [self.position]

    def step(self, feedforward, reference):
        measured = self.position + 1e-4 * self.effect.noise * self.chance.gauss(0, 1)
        push = 0.6 * self.effect.gain * feedforward[0] + 0.4 * reference[0]
        self.position += 0.2 * (push - self.position)
        return [measured], [20.0]


class Bench:
    def __init__(self, plant=None, faults=(), block_bytes=600, seed=0, **options):
        self.now_ns = 10**9
        self.plant = plant or LinePlant()
        self.options = RigOptions(chunk=20, seed=seed, **options)
        script = FaultScript(faults, seed)
        self.rig = Responder(self.plant, self.options, script, MAX_BODY, block_bytes, self.now_ns)
        self.session, self.peer, self.number = 77, 1, 0
        self.heard = []
        self.spoiled = 0

    # -- frames -----------------------------------------------------------------------------

    def frame(self, message, number=None, session=None):
        """A frame as a daemon sends it; a numbered message gets the next number."""
        if number is None:
            number = 0
            if isinstance(message, NUMBERED):
                self.number += 1
                number = self.number
        return pack_frame(self.session if session is None else session, number, encode(message))

    def put(self, data, peer=None):
        self.rig.receive(data, self.peer if peer is None else peer, self.now_ns)

    def take(self):
        """Messages that the rig has sent since the last look; bad frames are counted."""
        fresh = []
        for data, _ in self.rig.outgoing(self.now_ns):
            try:
                fresh.append(decode(unpack_frame(data, MAX_BODY).body))
            except ValueError:
                self.spoiled += 1
        self.heard += fresh
        return fresh

    def send(self, message, **choices):
        self.put(self.frame(message, **choices))
        return self.take()

    def ask(self, message, **choices):
        """The answer to a numbered message."""
        answers = [one for one in self.send(message, **choices) if isinstance(one, ANSWERS)]
        assert len(answers) == 1, answers
        return answers[0]

    def of(self, kind):
        return [one for one in self.heard if isinstance(one, kind)]

    # -- time -------------------------------------------------------------------------------

    def wait(self, ms, room=True):
        """Let the rig live for a while."""
        end_ns = self.now_ns + int(ms * MS)
        while self.now_ns < end_ns:
            self.rig.advance(self.now_ns, room=room)
            self.take()
            wake_ns = self.rig.next_wake_ns(self.now_ns, room=room)
            self.now_ns = min(end_ns, max(wake_ns, self.now_ns + 50_000))
        self.rig.advance(self.now_ns, room=room)
        self.take()

    def until(self, kind, alive=True):
        """Live until a message of that kind has come since the call; what came."""
        seen = len(self.heard)
        for _ in range(200_000):
            found = [one for one in self.heard[seen:] if isinstance(one, kind)]
            if found:
                return found[-1]
            if alive:
                self.send(Alive())
            self.wait(1)
        raise AssertionError(f"no {kind.__name__}; heard {self.heard[seen:][-5:]}")

    @property
    def beat(self):
        return self.of(Heartbeat)[-1]

    # -- a session's steps ------------------------------------------------------------------

    def hello(self, versions=(1,), session=None):
        if session is not None:
            self.session = session
        self.number = 0
        answer = self.ask(Hello(versions, "bench"))
        assert isinstance(answer, Greeting) or versions != (1,)
        return answer

    def tick(self):
        return self.rig.clock.tick(self.now_ns)

    def rows(self, values):
        """Values as (n_samples, n_channels) in the wire's type."""
        rows = np.asarray(values, dtype=f"<{self.options.sample_type}")
        return rows.reshape(len(rows), -1)

    def open(self, table, rows, revision=1, crc=None, streamed=False):
        crc = table_crc(rows.tobytes()) if crc is None else crc
        return self.ask(TableOpen(table, revision, len(rows), rows.shape[1], crc, streamed))

    def blocks(self, table, rows, revision=1, size=50):
        return [
            TableBlock(table, revision, first, rows[first : first + size].tobytes())
            for first in range(0, len(rows), size)
        ]

    def load(self, table, values, revision=1):
        """A whole stored table; the last answer."""
        rows = self.rows(values)
        state = self.open(table, rows, revision)
        if isinstance(state, TableState) and not state.verified:
            for block in self.blocks(table, rows, revision):
                self.send(block)
            state = self.ask(TableClose(table, revision))
        return state

    def arm(self, trial, feedforward, reference, start=0):
        """Load both tables and arm; the rig's answer."""
        self.load(Table.FEEDFORWARD, feedforward)
        if self.options.reference is None:
            self.load(Table.REFERENCE, reference)
        return self.ask(self.arm_order(trial, feedforward, reference, start))

    def arm_order(self, trial, feedforward, reference, start=0):
        crcs = [table_crc(self.rows(values).tobytes()) for values in (feedforward, reference)]
        return Arm(trial, len(feedforward), *crcs, start)

    def start(self, trial, ahead_ms=20):
        return self.ask(Start(trial, self.tick() + ahead_ms * 1000))

    def trial(self, trial, feedforward, reference):
        """A whole trial: Finished, and the samples that came, NaN where none did."""
        while self.beat.state == RigState.RETURNING:
            self.wait(10)
        armed = self.arm(trial, feedforward, reference)
        assert isinstance(armed, Armed), armed
        seen = len(self.heard)
        self.start(trial)
        done = self.until(Finished)
        return done, self.collect(trial, len(feedforward), self.heard[seen:])

    def collect(self, trial, n_samples, messages):
        width = len(self.plant.outputs) + len(self.plant.auxiliary)
        rows = np.full((n_samples, width), np.nan, dtype=f"<{self.options.sample_type}")
        for block in messages:
            if isinstance(block, Samples) and block.trial == trial:
                data = np.frombuffer(block.data, rows.dtype).reshape(-1, width)
                rows[block.first : block.first + len(data)] = data
        return rows


@pytest.fixture
def bench():
    """Builds benches; by default one that has greeted its rig."""

    def make(greet=True, **choices):
        made = Bench(**choices)
        if greet:
            made.hello()
        return made

    return make


@pytest.fixture
def move():
    """A feedforward and a reference of 200 samples within the line plant's limits."""
    t = np.linspace(0.0, 1.0, 200)
    return np.sin(np.pi * t) ** 2, 1.0 - np.cos(2 * np.pi * t)
