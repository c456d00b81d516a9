"""The daemon's side of the wire against a scripted rig: no I/O, a hand-moved clock."""

import numpy as np
import pytest

from drivers.codec import pack_frame, unpack_frame
from drivers.messages import (
    Arm,
    Armed,
    Bye,
    Channel,
    Clear,
    Credit,
    Describe,
    Disarm,
    Done,
    Fault,
    FaultCode,
    Finished,
    FinishReason,
    Greeting,
    Halt,
    Heartbeat,
    Hello,
    Ping,
    Pong,
    Refusal,
    Refused,
    Resend,
    RigState,
    Samples,
    Start,
    Started,
    StartMode,
    Table,
    TableBlock,
    TableClose,
    TableOpen,
    TableState,
    decode,
    encode,
)
from drivers.tables import table_crc
from trialrunner.conversation import Conversation, LinkTiming
from trialrunner.conversation import events as ev
from trialrunner.conversation.table_sender import TableData

N = 40
MS = 1_000_000


class ScriptedRig:
    """Answers like a rig; `drop` decides which of its frames or the daemon's are lost."""

    def __init__(self, capacity=1000, n_samples=N):
        self.session, self.last, self.stored = 0, 0, None
        self.executed, self.capacity, self.n_samples = [], capacity, n_samples
        self.rows = {Table.FEEDFORWARD: {}, Table.REFERENCE: {}}
        self.out = []
        self.samples = np.arange(n_samples * 2, dtype="<f4").reshape(n_samples, 2).tobytes()

    def send(self, message):
        self.out.append(pack_frame(self.session, 0, encode(message)))

    def receive(self, frame):
        got = unpack_frame(frame, 200_000)
        message = decode(got.body)
        if isinstance(message, Hello) and got.session != self.session:
            self.session, self.last = got.session, 0
        if got.session != self.session:
            return
        if got.sequence == 0:
            self.on_unnumbered(message)
        elif got.sequence == self.last + 1:
            self.last = got.sequence
            self.executed.append(message)
            self.stored = self.answer(message, got.sequence)
            self.send(self.stored)
        elif got.sequence == self.last:
            self.send(self.stored)

    def on_unnumbered(self, message):
        if isinstance(message, Ping):
            self.send(Pong(message.token, message.sent_ns, 500, 500))
        elif isinstance(message, TableBlock):
            self.rows[message.table][message.first] = message.data

    def answer(self, message, number):
        match message:
            case Hello():
                return Greeting(
                    number, 1, "scripted", 1_000_000, 1000, False, "f4", self.capacity, 10_000,
                    self.n_samples, 400, (0, 1), "actuator", "rig", 77, 1, 1, 1,
                )  # fmt: skip
            case Describe():
                name = f"channel {message.role}"
                return Channel(number, message.role, message.index, name, "N", -1, 1, 50, "")
            case TableOpen():
                self.opened = message
                return TableState(number, message.table, message.revision, False, ())
            case TableClose():
                rows = self.rows[message.table]
                data = b"".join(rows[k] for k in sorted(rows))
                good = table_crc(data) == self.opened.crc
                return TableState(number, message.table, message.revision, good, ())
            case Arm():
                return Armed(number, message.trial, 400, (0.25,))
            case Resend():
                return Done(number)
            case _:
                return Done(number)


@pytest.fixture
def line():
    return Line()


class Line:
    """A conversation and a rig with a lossy wire between them."""

    def __init__(self, rig=None, block_bytes=32):
        self.rig = rig or ScriptedRig()
        self.now = 1_000 * MS
        self.lose_down = lambda message: False
        self.lose_up = lambda message: False
        sessions = iter(range(1, 100))
        timing = LinkTiming(answer_timeout_s=0.1, silence_s=1.0, clock_exchanges=3)
        self.talk = Conversation(timing, "test", lambda: next(sessions), 131072, block_bytes)
        self.seen = []
        self.down = []

    def turn(self, advance_ms=1):
        self.now += advance_ms * MS
        self.talk.advance(self.now)
        frames = self.talk.urgent()
        block = self.talk.bulk()
        for frame in [*frames, *([block] if block else [])]:
            message = decode(unpack_frame(frame, 200_000).body)
            self.down.append(message)
            if not self.lose_down(message):
                self.rig.receive(frame)
        out, self.rig.out = self.rig.out, []
        for frame in out:
            if not self.lose_up(decode(unpack_frame(frame, 200_000).body)):
                self.talk.receive(frame, self.now)
        while self.talk.events:
            self.seen.append(self.talk.events.popleft())

    def until(self, kind, limit=400, advance_ms=1):
        for _ in range(limit):
            for event in self.seen:
                if isinstance(event, kind):
                    self.seen.remove(event)
                    return event
            self.turn(advance_ms)
        pytest.fail(f"no {kind.__name__}; saw {self.seen}")

    def greet(self):
        self.talk.connect(self.now)
        greeted = self.until(ev.Greeted)
        self.beat(RigState.READY)
        return greeted

    def beat(self, state, trial=0, count=0, fault=0):
        self.rig.send(Heartbeat(state, trial, count, 450, fault))

    def prepare(self, trial=5, start=StartMode.DAEMON, n_samples=N):
        values = np.linspace(0, 1, n_samples, dtype="<f4")
        table = TableData.of(Table.FEEDFORWARD, values.tobytes(), n_samples, 1)
        self.talk.prepare(trial, [table], start)
        return table

    def run_trial(self, trial=5, lose=lambda first: False):
        self.talk.start_at(600)
        self.turn()
        self.rig.send(Started(trial, 600))
        for first in range(0, self.rig.n_samples, 4):
            if not lose(first):
                data = self.rig.samples[first * 8 : (first + 4) * 8]
                self.rig.send(Samples(trial, first, data))
        self.finish(trial)

    def finish(self, trial=5):
        n = self.rig.n_samples
        crc = table_crc(self.rig.samples)
        self.rig.send(Finished(trial, FinishReason.COMPLETE, n, 600, crc, 1, (0.25,)))


def test_the_greeting_names_every_channel(line):
    greeted = line.greet()
    assert greeted.greeting.name == "scripted"
    assert [c.name for c in (*greeted.inputs, *greeted.outputs, *greeted.auxiliary)] == [
        "channel 0",
        "channel 1",
        "channel 2",
    ]


def test_a_lost_answer_is_asked_for_again_and_the_order_carried_out_once(line):
    lost = iter([True, False])
    line.lose_up = lambda message: isinstance(message, Greeting) and next(lost, False)
    line.greet()
    assert sum(isinstance(m, Hello) for m in line.down) == 2
    assert sum(isinstance(m, Hello) for m in line.rig.executed) == 1


def test_a_refused_version_is_reported_in_the_rigs_words(line):
    line.rig.answer = lambda message, number: Refused(number, Refusal.VERSION, "speaks 7 only")
    line.talk.connect(line.now)
    refused = line.until(ev.RigRefused)
    assert (refused.order, refused.text) == ("Hello", "speaks 7 only")


def test_a_rig_that_chose_a_version_we_did_not_offer_is_refused(line):
    answer = line.rig.answer
    line.rig.answer = lambda m, n: (
        Greeting(*[9 if k == "version" else v for k, v in vars(answer(m, n)).items()])
        if isinstance(m, Hello)
        else answer(m, n)
    )
    line.talk.connect(line.now)
    assert "protocol version 9; this daemon speaks 1" in line.until(ev.RigRefused).text


def test_a_trial_is_prepared_started_and_collected_whole(line):
    line.greet()
    table = line.prepare()
    armed = line.until(ev.TrialArmed)
    assert armed == ev.TrialArmed(5, (0.25,))
    assert line.talk.clock.fresh == 3
    assert b"".join(line.rig.rows[0][k] for k in sorted(line.rig.rows[0])) == table.data
    line.run_trial()
    got = line.until(ev.Collected)
    assert got.whole
    assert got.count == N
    assert got.asked_again == 0
    expected = np.frombuffer(line.rig.samples, "<f4").reshape(N, 2)
    np.testing.assert_array_equal(got.samples, expected)


def test_missing_blocks_are_asked_for_again_by_position(line):
    line.greet()
    line.prepare()
    line.until(ev.TrialArmed)
    line.run_trial(lose=lambda first: first in (8, 12, 32))
    line.until(ev.TrialFinished)
    line.turn()
    asked = [m for m in line.down if isinstance(m, Resend)]
    assert asked == [Resend(5, ((8, 8), (32, 4)))]
    for first in (8, 12, 32):
        line.rig.send(Samples(5, first, line.rig.samples[first * 8 : (first + 4) * 8]))
    line.finish()
    got = line.until(ev.Collected)
    assert got.whole
    assert got.asked_again == 12


def test_a_trial_that_stays_incomplete_is_given_up_after_the_stated_rounds(line):
    line.greet()
    line.prepare()
    line.until(ev.TrialArmed)
    line.run_trial(lose=lambda first: first == 8)
    line.until(ev.TrialFinished)
    for _ in range(20):
        line.turn()
        line.finish()
    got = line.until(ev.Collected)
    assert not got.whole
    assert np.isnan(got.samples[8:12]).all()
    assert not np.isnan(got.samples[:8]).any()
    assert sum(isinstance(m, Resend) for m in line.down) == LinkTiming().resend_rounds


def test_a_rig_that_kept_nothing_leaves_the_trial_incomplete(line):
    answer = line.rig.answer
    line.rig.answer = lambda m, n: (
        Refused(n, Refusal.NOT_KEPT, "none kept") if isinstance(m, Resend) else answer(m, n)
    )
    line.greet()
    line.prepare()
    line.until(ev.TrialArmed)
    line.run_trial(lose=lambda first: first == 0)
    assert not line.until(ev.Collected).whole


def test_a_lost_finish_is_asked_for_when_the_heartbeat_shows_the_rig_at_rest(line):
    line.greet()
    line.prepare()
    line.until(ev.TrialArmed)
    line.lose_up = lambda message: isinstance(message, Finished)
    line.run_trial()
    line.turn()
    line.lose_up = lambda message: False
    line.beat(RigState.RETURNING, trial=5, count=N)
    line.turn()
    line.turn()
    assert Resend(5, ()) in line.down
    line.finish()
    assert line.until(ev.Collected).whole


def test_samples_of_another_trial_or_beyond_the_end_are_dropped(line):
    line.greet()
    line.prepare()
    line.until(ev.TrialArmed)
    line.talk.start_at(600)
    line.rig.send(Started(5, 600))
    line.rig.send(Samples(4, 0, b"\1" * 8 * N))
    line.rig.send(Samples(5, N - 1, b"\1" * 16))
    line.rig.send(Samples(5, 0, b"\1" * 7))
    line.turn()
    assert not any(isinstance(e, ev.SamplesArrived) for e in line.seen)


def test_a_table_longer_than_the_rigs_memory_is_streamed_under_credit():
    line = Line(ScriptedRig(capacity=16, n_samples=64))
    line.greet()
    line.prepare(n_samples=64)
    line.turn()
    assert line.rig.opened.streamed
    line.rig.send(Credit(0, 1, 0, 16))
    for _ in range(10):
        line.turn()
    assert sorted(line.rig.rows[0]) == [0, 8]
    line.rig.send(Credit(0, 1, 16, 16))
    line.until(ev.TrialArmed)
    assert not any(isinstance(m, TableClose) for m in line.down)
    line.rig.send(Credit(0, 1, 16, 32))
    for _ in range(10):
        line.turn()
    assert sorted(line.rig.rows[0]) == [0, 8, 16, 24]


def test_a_lost_streamed_block_is_sent_again_from_the_gap():
    line = Line(ScriptedRig(capacity=16, n_samples=64))
    line.greet()
    line.prepare(n_samples=64)
    lost = iter([True])
    line.lose_down = lambda m: isinstance(m, TableBlock) and m.first == 0 and next(lost, False)
    line.turn()
    line.rig.send(Credit(0, 1, 0, 16))
    for _ in range(6):
        line.turn()
    assert 0 not in line.rig.rows[0]
    for _ in range(2):
        line.rig.send(Credit(0, 1, 0, 16))
        line.turn()
    for _ in range(6):
        line.turn()
    assert sorted(line.rig.rows[0]) == [0, 8]


def test_halt_goes_first_and_is_repeated_until_the_rig_is_safe(line):
    line.greet()
    line.prepare()
    line.until(ev.TrialArmed)
    line.talk.halt(1, "operator")
    line.turn()
    assert isinstance(line.down[-1], Halt)
    for _ in range(100):
        line.turn()
    assert sum(isinstance(m, Halt) for m in line.down) >= 3
    line.beat(RigState.SAFE, fault=FaultCode.HALTED)
    line.turn()
    sent = len([m for m in line.down if isinstance(m, Halt)])
    for _ in range(100):
        line.turn()
    assert len([m for m in line.down if isinstance(m, Halt)]) == sent


def test_a_number_under_way_when_halting_is_not_given_to_another_message(line):
    line.greet()
    line.lose_up = lambda message: isinstance(message, TableState)
    line.prepare()
    line.turn()
    line.talk.halt(1, "operator")
    line.talk.clear("checked")
    line.turn()
    line.lose_up = lambda message: False
    assert not any(isinstance(m, Clear) for m in line.down)
    line.beat(RigState.SAFE, fault=FaultCode.HALTED)
    line.until(ev.RigCleared, advance_ms=20)
    assert [type(m) for m in line.rig.executed[-2:]] == [TableOpen, Clear]


def test_a_fault_and_a_safe_state_are_reported(line):
    line.greet()
    line.rig.send(Fault(FaultCode.EMERGENCY_STOP, "button pressed", 1))
    assert line.until(ev.RigFaulted) == ev.RigFaulted(1, "button pressed")
    line.beat(RigState.SAFE, fault=FaultCode.EMERGENCY_STOP)
    assert line.until(ev.RigFaulted).text == "emergency stop"


def test_disarm_takes_an_armed_trial_back(line):
    line.greet()
    line.prepare()
    line.until(ev.TrialArmed)
    line.talk.disarm()
    line.until(ev.TrialDisarmed)
    assert isinstance(line.rig.executed[-1], Disarm)


def test_a_start_too_late_is_reported_with_its_code(line):
    answer = line.rig.answer
    line.rig.answer = lambda m, n: (
        Refused(n, Refusal.TOO_LATE, "tick 600 is over") if isinstance(m, Start) else answer(m, n)
    )
    line.greet()
    line.prepare()
    line.until(ev.TrialArmed)
    line.talk.start_at(600)
    assert line.until(ev.RigRefused).code == Refusal.TOO_LATE


def test_the_daemon_stays_audible_within_a_quarter_of_the_watchdog(line):
    line.greet()
    last_ns, gaps = line.now, []
    for _ in range(600):
        before = len(line.down)
        line.beat(RigState.READY)
        line.turn()
        if len(line.down) > before:
            gaps.append(line.now - last_ns)
            last_ns = line.now
    assert max(gaps) <= 102 * MS


def test_a_silent_rig_is_reported_once_and_a_new_session_starts_clean(line):
    line.greet()
    line.lose_up = lambda message: True
    silent = line.until(ev.RigSilent, limit=3000)
    assert "1 s" in silent.text or "does not answer" in silent.text
    line.lose_up = lambda message: False
    line.talk.connect(line.now)
    line.until(ev.Greeted)
    assert line.rig.session == 2


def test_frames_of_an_old_session_and_garbage_are_counted_and_dropped(line):
    line.greet()
    line.talk.receive(pack_frame(999, 0, encode(Heartbeat(1, 0, 0, 0, 0))), line.now)
    line.talk.receive(b"garbage that is long enough for a frame", line.now)
    line.talk.receive(b"", line.now)
    line.talk.receive(pack_frame(1, 0, b"\xc1"), line.now)
    line.talk.receive(pack_frame(1, 0, encode(Bye())), line.now)
    assert line.talk.errors["session"] == 1
    assert line.talk.errors["crc"] == 1
    assert line.talk.errors["length"] == 1
    assert line.talk.errors["packing"] == 1
    assert line.talk.errors["wrong direction"] == 1


def test_goodbye_is_acknowledged(line):
    line.greet()
    line.talk.close()
    line.until(ev.SessionClosed)
    assert isinstance(line.rig.executed[-1], Bye)


def test_a_rig_that_never_returns_is_reported(line):
    line.talk.connect(line.now)
    line.until(ev.Greeted)
    line.beat(RigState.RETURNING)
    line.prepare()
    for _ in range(1300):
        line.beat(RigState.RETURNING)
        line.turn(advance_ms=100)
    assert any(isinstance(e, ev.RigSilent) and "not ready" in e.text for e in line.seen)


def test_a_state_told_before_the_channels_are_known_is_kept(line):
    line.talk.connect(line.now)
    line.turn()
    line.beat(RigState.READY)
    line.until(ev.Greeted)
    assert line.until(ev.RigChanged, limit=1).state is RigState.READY
