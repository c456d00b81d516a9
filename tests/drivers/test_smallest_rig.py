"""A rig written from PROTOCOL.md alone ("The smallest rig"): it shares no line with drivers.

Type numbers and codes are written out from the document. What it and the daemon understand of each
other is therefore what the document says, not what one shared codec happens to do.
"""

import struct
from collections.abc import Callable
from typing import Any

import msgpack
import pytest

from drivers import limits
from drivers.framing import FrameSplitter, stuff
from drivers.messages import FinishReason, RigState, StartMode, Table
from trialrunner.conversation import Conversation, LinkTiming, events
from trialrunner.conversation.table_sender import TableData

MS_NS = 1_000_000
N_SAMPLES = 320
RETURN_MS = 40


class SmallestRig:
    """Ticks are milliseconds; one sample a tick; y[k + 1] = y[k] / 2 + u[k]."""

    def __init__(self, slow: Any) -> None:
        self.slow = slow
        self.now = 0
        self.state, self.fault = 1, 0
        self.session = self.last = 0
        self.answer: list[Any] = []
        self.table, self.here, self.opened = bytearray(), set[int](), [0] * 6
        self.verified = False
        self.trial = self.start_tick = self.heard = self.beaten = self.ready_at = 0
        self.reason = 0
        self.outputs: list[float] = []
        self.half = b""
        self.out = b""

    def send(self, *body: Any) -> None:
        self.out += self.slow.wire(self.session, 0, self.slow.pack(list(body)))

    def beat(self) -> None:
        self.beaten = self.now
        self.send(22, self.state, self.trial, len(self.outputs), self.now, self.fault)

    def enter(self, state: int) -> None:
        self.state = state
        self.beat()

    def feed(self, wire: bytes) -> None:
        *whole, self.half = (self.half + wire).split(b"\0")
        for stuffed in whole:
            frame = self.slow.unstuff(stuffed) or b""
            if len(frame) > 12 and self.slow.crc32c(frame[:-4]) == int.from_bytes(
                frame[-4:], "little"
            ):
                session, number = struct.unpack("<II", frame[:8])
                self.take(session, number, msgpack.unpackb(frame[8:-4]))

    def take(self, session: int, number: int, body: list[Any]) -> None:
        if body[0] == 1 and session != self.session:
            self.session, self.last, self.verified = session, 1, False
            self.answer = [2, 1, 1, "smallest", 1000, 1, False, "f4", 1000, 1000, 1000, 1000, [0],
                           "actuator", "rig", 77, 1, 1, 0]  # fmt: skip
            self.heard = self.now
            self.send(*self.answer)
            self.beat()
        elif session == self.session:
            self.heard = self.now
            if number == 0:
                self.on_report(body)
            elif number == self.last + 1:
                self.last, self.answer = number, self.carry_out(number, body)
                self.send(*self.answer)
            elif number == self.last:
                self.send(*self.answer)

    def on_report(self, body: list[Any]) -> None:
        if body[0] == 7:
            self.send(8, body[1], body[2], self.now, self.now)
        elif body[0] == 10 and body[2] == self.opened[1] and not self.verified:
            first, data = body[3], body[4]
            self.table[4 * first : 4 * first + len(data)] = data
            self.here |= set(range(first, first + len(data) // 4))
        elif body[0] == 24 and self.state != 4:
            self.stop(6, body[2])

    def stop(self, fault: int, text: str) -> None:
        running, self.fault = self.state == 3, fault
        self.enter(4)
        if running:
            self.finish(3)
        self.send(25, fault, text, self.now)

    def carry_out(self, number: int, body: list[Any]) -> list[Any]:
        kind = body[0]
        if kind == 3:
            names = {0: "push", 1: "place"}
            return [4, number, body[1], body[2], names[body[1]], "N", -9.0, 9.0, float("inf"), ""]
        if kind == 9:
            if not (self.verified and self.opened[4] == body[5]):
                self.table, self.here = bytearray(4 * body[3]), set()
                self.verified = False
            self.opened = [body[1], body[2], body[3], body[4], body[5], body[6]]
            return [12, number, 0, body[2], self.verified, []]
        if kind == 11:
            gaps = [[k, 1] for k in range(self.opened[2]) if k not in self.here][:24]
            self.verified = not gaps and self.slow.crc32c(bytes(self.table)) == self.opened[4]
            return [12, number, 0, body[2], self.verified, gaps]
        if kind == 13:
            if self.state != 1 or not self.verified or body[3] != self.opened[4] or body[4] != 77:
                return [5, number, 3 if self.state != 1 else 4, "not now"]
            self.trial, self.outputs, self.start_tick = body[1], [], 0
            self.enter(2)
            return [14, number, self.trial, self.now, [0.0]]
        if kind == 15:
            if body[2] <= self.now:
                return [5, number, 5, "over"]
            self.start_tick = body[2]
        if kind == 20:
            for first, count in body[2]:
                self.samples(first, first + count)
            self.finish(self.reason)
        if kind == 26:
            self.fault, self.ready_at = 0, self.now + RETURN_MS
            self.enter(0)
        return [6, number]

    def samples(self, first: int, end: int) -> None:
        for k in range(first, end, 150):
            part = self.outputs[k : min(k + 150, end)]
            self.send(18, self.trial, k, struct.pack(f"<{len(part)}f", *part))

    def finish(self, reason: int) -> None:
        self.reason, count = reason, len(self.outputs)
        crc = self.slow.crc32c(struct.pack(f"<{count}f", *self.outputs))
        played = self.slow.crc32c(bytes(self.table[: 4 * count]))
        self.send(19, self.trial, reason, count, self.start_tick, crc, played, [0.0])

    def tick(self, now: int) -> None:
        self.now = now
        if self.state == 0 and now >= self.ready_at:
            self.enter(1)
        if self.state in (2, 3) and now - self.heard > 1000:
            self.stop(4, "silence")
        if self.state == 2 and self.start_tick and now >= self.start_tick:
            self.enter(3)
            self.send(17, self.trial, self.start_tick)
        if self.state == 3:
            k = len(self.outputs)
            before = self.outputs[-1] / 2 + self.row(k - 1) if k else 0.0
            self.outputs.append(struct.unpack("<f", struct.pack("<f", before))[0])
            if (k + 1) % 150 == 0 or k + 1 == N_SAMPLES:
                self.samples(k // 150 * 150, k + 1)
            if k + 1 == N_SAMPLES:
                self.finish(0)
                self.ready_at = now + RETURN_MS
                self.enter(0)
        if self.session and now - self.beaten >= 250:
            self.beat()

    def row(self, k: int) -> float:
        return float(struct.unpack_from("<f", self.table, 4 * k)[0])


class Bench:
    """The daemon's conversation and the rig on one line, in steps of a millisecond."""

    def __init__(self, slow: Any) -> None:
        self.rig = SmallestRig(slow)
        self.talk = Conversation(
            LinkTiming(), "bench", lambda: 0xA0B00C0D, limits.MAX_SERIAL_BODY_BYTES,
            limits.SERIAL_BLOCK_BYTES,
        )  # fmt: skip
        self.now = 5
        self.spoil: Callable[[bytes], bytes] = lambda wire: wire
        self._splitter = FrameSplitter(652)
        self.talk.connect(self.now * MS_NS)

    def step(self) -> None:
        self.now += 1
        self.talk.advance(self.now * MS_NS)
        frames = self.talk.urgent()
        block = self.talk.bulk()
        for frame in [*frames, *([block] if block else [])]:
            self.rig.feed(self.spoil(stuff(frame)))
        self.rig.tick(self.now)
        wire, self.rig.out = self.spoil(self.rig.out), b""
        for frame in self._splitter.feed(wire):
            self.talk.receive(frame, self.now * MS_NS)

    def until(self, kind: type[Any], most_ms: int = 20_000) -> Any:
        """The next event of a kind."""
        for _ in range(most_ms):
            while self.talk.events:
                event = self.talk.events.popleft()
                if isinstance(event, kind):
                    return event
            self.step()
        raise AssertionError(f"no {kind.__name__} within {most_ms} ms; errors {self.talk.errors}")

    def run_trial(self, trial: int, feedforward: list[float]) -> Any:
        data = struct.pack(f"<{N_SAMPLES}f", *feedforward)
        table = TableData.of(Table.FEEDFORWARD, data, N_SAMPLES, 1)
        self.talk.prepare(trial, [table], StartMode.DAEMON)
        self.until(events.TrialArmed)
        self.talk.start_at(self.now + 30)
        started = self.until(events.TrialStarted)
        collected = self.until(events.Collected)
        assert collected.start_tick == started.tick
        return collected


FEEDFORWARD = [0.25 * (k % 8) for k in range(N_SAMPLES)]


def expected() -> list[float]:
    """By the sampling convention: row k first shows in sample k + 1. Exact in float32 or nearly."""
    outputs = [0.0]
    for k in range(N_SAMPLES - 1):
        outputs.append(outputs[-1] / 2 + FEEDFORWARD[k])
    return outputs


@pytest.fixture
def bench(slow: Any) -> Bench:
    return Bench(slow)


def test_a_rig_from_the_document_alone_is_understood(bench: Bench) -> None:
    """Greeting, channels, table, clocks, start, samples, return, and the next trial."""
    greeted = bench.until(events.Greeted)
    assert greeted.greeting.name == "smallest"
    assert [one.name for one in (*greeted.inputs, *greeted.outputs)] == ["push", "place"]
    for trial in (1, 2):
        collected = bench.run_trial(trial, FEEDFORWARD)
        assert collected.whole
        assert collected.reason is FinishReason.COMPLETE
        assert collected.samples[:, 0].tolist() == pytest.approx(expected(), abs=1e-5)
    # The heartbeat that follows the greeting comes before the channels are known.
    assert set(bench.talk.errors) <= {"before greeting"}


@pytest.mark.parametrize("every", [7, 11, 13])
def test_it_is_understood_over_a_bad_line(bench: Bench, every: int) -> None:
    """Each so-manyth piece that goes over the line has a wrong byte, both ways."""
    count = 0

    def spoil(wire: bytes) -> bytes:
        nonlocal count
        count += bool(wire)
        if not wire or count % every:
            return wire
        at = count % len(wire)
        return wire[:at] + bytes([wire[at] ^ 0x40]) + wire[at + 1 :]

    bench.spoil = spoil
    bench.until(events.Greeted)
    collected = bench.run_trial(1, FEEDFORWARD)
    assert collected.whole
    assert collected.samples[:, 0].tolist() == pytest.approx(expected(), abs=1e-5)


def test_it_halts_clears_and_goes_on(bench: Bench) -> None:
    """Halt in a trial, the safe state, a person's Clear, the next trial."""
    bench.until(events.Greeted)
    data = struct.pack(f"<{N_SAMPLES}f", *FEEDFORWARD)
    table = TableData.of(Table.FEEDFORWARD, data, N_SAMPLES, 1)
    bench.talk.prepare(1, [table], StartMode.DAEMON)
    bench.until(events.TrialArmed)
    bench.talk.start_at(bench.now + 30)
    bench.until(events.TrialStarted)
    bench.talk.halt(1, "looks wrong")
    collected = bench.until(events.Collected)
    assert collected.reason is FinishReason.HALTED
    assert collected.count < N_SAMPLES
    assert bench.rig.state == RigState.SAFE
    bench.talk.clear("looked at it")
    bench.until(events.RigCleared)
    assert bench.run_trial(2, FEEDFORWARD).whole


def test_its_watchdog_hears_the_daemon_through_a_quiet_wait(bench: Bench) -> None:
    """Seconds of waiting while armed do not set it off; real silence does."""
    bench.until(events.Greeted)
    data = struct.pack(f"<{N_SAMPLES}f", *FEEDFORWARD)
    table = TableData.of(Table.FEEDFORWARD, data, N_SAMPLES, 1)
    bench.talk.prepare(1, [table], StartMode.DAEMON)
    bench.until(events.TrialArmed)
    for _ in range(5000):
        bench.step()
    assert bench.rig.state == RigState.ARMED
    for _ in range(1100):
        bench.rig.tick(bench.rig.now + 1)
    assert bench.rig.state == RigState.SAFE
