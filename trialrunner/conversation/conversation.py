"""The whole conversation with one rig, without I/O.

Feed it `receive` with every frame and `advance` with the time; take frames from `urgent` and, when
the line is idle, from `bulk`, and events from `events`. It keeps the rules of PROTOCOL.md; what a
trial is worth is not its business.
"""

from collections import Counter, deque
from collections.abc import Callable, Sequence

from drivers.codec import pack_frame, unpack_frame
from drivers.errors import WireError
from drivers.messages import (
    ANSWERS,
    Alive,
    Bye,
    Clear,
    Credit,
    Fault,
    FaultCode,
    Finished,
    Halt,
    Heartbeat,
    Message,
    Ping,
    Pong,
    Refused,
    RigState,
    Samples,
    Started,
    StartMode,
    decode,
    encode,
)
from trialrunner.conversation.commander import Commander
from trialrunner.conversation.events import (
    Collected,
    Greeted,
    RigChanged,
    RigCleared,
    RigEvent,
    RigFaulted,
    RigRefused,
    RigSilent,
    SessionClosed,
)
from trialrunner.conversation.greeter import Greeter
from trialrunner.conversation.table_sender import TableData
from trialrunner.conversation.timing import LinkTiming
from trialrunner.conversation.trial_talk import TrialTalk
from trialrunner.core.clock_sync import ClockSync
from trialrunner.timers import SECOND_NS

HARMLESS = frozenset({"session", "before greeting", "stale answer", "stale pong", "stale samples"})
"""Kinds of frames that any restart or repeated message brings with it."""

MAX_REASON = 100
"""Letters of a reason that go to the rig; all of it goes into the record."""


class Conversation:
    """One conversation; survives reconnects, each of which is a new session."""

    def __init__(
        self,
        timing: LinkTiming,
        name: str,
        new_session: Callable[[], int],
        max_body: int,
        block_bytes: int,
    ) -> None:
        self._timing = timing
        self._new_session = new_session
        self._max_body = max_body
        self._answer_ns = int(timing.answer_timeout_s * SECOND_NS)
        self.events: deque[RigEvent] = deque()
        self.errors: Counter[str] = Counter()
        """Frames and messages not taken, by kind, over all sessions."""
        self.heartbeat: Heartbeat | None = None
        self.greeted: Greeted | None = None
        self._urgent: deque[Message] = deque()
        self._commander = Commander(self._answer_ns, timing.max_tries)
        self._greeter = Greeter(self._commander, name, self.emit)
        self._trial = TrialTalk(self, self._commander, block_bytes, timing.resend_rounds)
        self._session = 0
        self._forget(0)

    def _forget(self, now_ns: int) -> None:
        """State of a session that is no more."""
        self._now_ns = self._heard_ns = self._sent_ns = self._waiting_since_ns = now_ns
        self._halt_again_ns = now_ns
        self.greeted = self.heartbeat = None
        self._early_beat: Heartbeat | None = None
        self._after_halt: deque[Callable[[], None]] = deque()
        """Orders that wait until the rig has confirmed a halt."""
        self._clearing = False
        """Clear is under way: what the rig still says of our own halt is news of the past."""
        self.clock = ClockSync(1)
        self._ping: tuple[int, int] | None = None
        self._token = 0
        self._halt: Halt | None = None
        self._silent = False
        self._urgent.clear()
        self._commander.restart()
        self._trial.forget()

    @property
    def bad_frames(self) -> int:
        """Frames that were wrong, not merely late or of an earlier session."""
        return sum(n for kind, n in self.errors.items() if kind not in HARMLESS)

    # -- orders -----------------------------------------------------------------------------

    def connect(self, now_ns: int) -> None:
        """Open a new session with the greeting."""
        self._forget(now_ns)
        self._session = self._new_session()
        self._greeter.start()

    def prepare(self, trial: int, tables: Sequence[TableData], start: StartMode) -> None:
        """Tables, return, arming, clocks: TrialArmed follows, or RigRefused."""
        self._after_halt.append(lambda: self._prepare(trial, tables, start))
        self._go_on_after_halt()

    def _prepare(self, trial: int, tables: Sequence[TableData], start: StartMode) -> None:
        assert self.greeted is not None
        self._waiting_since_ns = self._now_ns
        self._trial.prepare(self.greeted.greeting, trial, tables, start)

    def start_at(self, tick: int) -> None:
        """Start the armed trial at a tick of the rig."""
        self._trial.start_at(tick)

    def disarm(self) -> None:
        """Give up preparing or the armed trial; TrialDisarmed follows unless it already runs."""
        self._trial.disarm()

    def halt(self, category: int, text: str) -> None:
        """To the safe state now; goes ahead of everything and is repeated until it is so."""
        self._halt = Halt(category, _reason(text))
        self._after_halt.clear()
        self._halt_again_ns = self._now_ns
        self._trial.abandon()

    def clear(self, why: str) -> None:
        """A person asks the rig to leave its safe state: RigCleared follows, or RigRefused.

        A halt that the rig has not confirmed yet comes first.
        """
        self._clearing = True
        self._after_halt.append(lambda: self._commander.ask(Clear(_reason(why)), self._on_clear))
        self._go_on_after_halt()

    def _go_on_after_halt(self) -> None:
        while self._halt is None and self._after_halt:
            self._after_halt.popleft()()

    def close(self) -> None:
        """Say goodbye; SessionClosed follows."""
        self._trial.abandon()
        self._commander.ask(Bye(), lambda _: self.emit(SessionClosed()))

    def give_up_trial(self) -> Collected | None:
        """What has arrived of the trial under way; nothing more will be collected of it."""
        return self._trial.give_up()

    # -- frames out -------------------------------------------------------------------------

    def urgent(self) -> list[bytes]:
        """Frames that must go out now, in order."""
        if not self._session or self._silent:
            return []
        frames = []
        if self._halt is not None and self._now_ns >= self._halt_again_ns:
            self._halt_again_ns = self._now_ns + self._answer_ns // 4
            frames.append(self._pack(self._halt, 0))
        frames += [self._pack(message, 0) for message in self._urgent]
        self._urgent.clear()
        due = self._commander.due(self._now_ns)
        if due is not None:
            frames.append(self._pack(*due))
        if frames:
            self._sent_ns = self._now_ns
        return frames

    def bulk(self) -> bytes | None:
        """The next table block, to be asked for only while the line is idle."""
        block = self._trial.next_block()
        if block is None:
            return None
        self._sent_ns = self._now_ns
        return self._pack(block, 0)

    def _pack(self, message: Message, number: int) -> bytes:
        return pack_frame(self._session, number, encode(message))

    # -- frames and time in -----------------------------------------------------------------

    def receive(self, frame: bytes, now_ns: int) -> None:
        """Take one frame; bad ones and those of another session are counted and dropped."""
        self._now_ns = now_ns
        try:
            unpacked = unpack_frame(frame, self._max_body)
            if unpacked.session != self._session:
                self.errors["session"] += 1
                return
            message = decode(unpacked.body)
        except WireError as error:
            self.errors[error.kind] += 1
            return
        self._heard_ns = now_ns
        self._dispatch(message)

    def advance(self, now_ns: int) -> None:
        """Let time pass: repeat what was not answered, stay audible, notice silence."""
        self._now_ns = now_ns
        if not self._session or self._silent:
            return
        trouble = self._trouble()
        if trouble:
            self._silent = True
            self.emit(RigSilent(trouble))
        elif self.greeted:
            self._keep_talking()

    def _trouble(self) -> str:
        """Why this session has no future; empty if it has."""
        timing = self._timing
        if self._commander.exhausted(self._now_ns):
            return f"the rig does not answer {self._commander.under_way}"
        if self.greeted and self._now_ns - self._heard_ns > timing.silence_s * SECOND_NS:
            return f"nothing was heard from the rig for {timing.silence_s:g} s"
        waited_ns = self._now_ns - self._waiting_since_ns
        if self._trial.waiting_for_ready and waited_ns > timing.ready_timeout_s * SECOND_NS:
            return f"the rig was not ready again within {timing.ready_timeout_s:g} s"
        return ""

    def next_wake_ns(self) -> int:
        """When `advance` is wanted next, if no frame comes before."""
        wakes = [self._now_ns + SECOND_NS]
        if self.greeted is not None:
            wakes.append(self._sent_ns + self._alive_interval_ns())
        if self._halt is not None:
            wakes.append(self._halt_again_ns)
        if self._ping is not None:
            wakes.append(self._ping[1] + self._answer_ns)
        again_ns = self._commander.next_wake_ns()
        if again_ns is not None:
            wakes.append(again_ns)
        return min(wakes)

    def _alive_interval_ns(self) -> int:
        watchdog_ms = 1000 if self.greeted is None else self.greeted.greeting.watchdog_ms
        return max(watchdog_ms, 20) * SECOND_NS // 4000

    def _keep_talking(self) -> None:
        if self._ping is not None and self._now_ns - self._ping[1] >= self._answer_ns:
            self._send_ping()
        elif self._now_ns - self._sent_ns >= self._alive_interval_ns():
            # A ping keeps us audible and the clocks together; Alive serves while one is out.
            if self._ping is None:
                self._send_ping()
            else:
                self._urgent.append(Alive())

    # -- messages of the rig ----------------------------------------------------------------

    def emit(self, event: RigEvent) -> None:
        """Hand an event to the session; a greeting also opens our own state."""
        if isinstance(event, Greeted):
            self.greeted = event
            self._heard_ns = self._now_ns
            self.clock = ClockSync(event.greeting.tick_hz, event.greeting.clock_steps)
        self.events.append(event)
        if isinstance(event, Greeted) and self._early_beat is not None:
            self._on_heartbeat(self._early_beat)

    def _dispatch(self, message: Message) -> None:
        if isinstance(message, ANSWERS):
            if not self._commander.answered(message.number, message):
                self.errors["stale answer"] += 1
        elif self.greeted is None:
            self._before_greeting(message)
        else:
            self._on_report(message)

    def _before_greeting(self, message: Message) -> None:
        """A rig tells its state at once, while its channels are still being asked for."""
        if isinstance(message, Heartbeat):
            self._early_beat = message
        else:
            self.errors["before greeting"] += 1

    def _on_report(self, message: Message) -> None:
        match message:
            case Samples():
                self._trial.on_samples(message)
            case Heartbeat():
                self._on_heartbeat(message)
            case Pong():
                self._on_pong(message)
            case Started():
                self._trial.on_started(message)
            case Finished():
                self._trial.on_finished(message)
            case Credit():
                self._trial.on_credit(message)
            case Fault():
                self._on_fault(message.code, message.text)
            case _:
                self.errors["wrong direction"] += 1

    def _on_heartbeat(self, beat: Heartbeat) -> None:
        if beat.state not in set(RigState):
            self.errors["state"] += 1
            return
        before, self.heartbeat = self.heartbeat, beat
        if before is None or before.state != beat.state:
            self._waiting_since_ns = self._now_ns
            self.emit(RigChanged(RigState(beat.state)))
            if beat.state == RigState.SAFE and self._halt is None:
                self._on_fault(beat.fault, _fault_word(beat.fault))
        if beat.state == RigState.SAFE:
            self._halt = None
            self._go_on_after_halt()
        self._trial.try_arm()
        self._trial.look_for_finish(beat)

    def _on_fault(self, code: int, text: str) -> None:
        if not (self._clearing and code == FaultCode.HALTED):
            self.emit(RigFaulted(code, text))

    def _on_clear(self, answer: Message) -> None:
        self._clearing = False
        if isinstance(answer, Refused):
            self.emit(RigRefused("Clear", answer.code, answer.text))
        else:
            self.emit(RigCleared())

    # -- clock ------------------------------------------------------------------------------

    def begin_clock_burst(self) -> None:
        """Exchange clocks some times in a row, right before a start."""
        self.clock.restart()
        self._send_ping()

    def _send_ping(self) -> None:
        self._token = (self._token + 1) % 2**32
        self._ping = (self._token, self._now_ns)
        self._urgent.append(Ping(self._token, self._now_ns))

    def _on_pong(self, pong: Pong) -> None:
        if self._ping is None or (pong.token, pong.sent_ns) != self._ping:
            self.errors["stale pong"] += 1
            return
        self._ping = None
        self.clock.add(pong.sent_ns, pong.received_tick, pong.answered_tick, self._now_ns)
        if not self._trial.wants_clock:
            return
        if self.clock.fresh < self._timing.clock_exchanges:
            self._send_ping()
        elif self.clock.fresh == self._timing.clock_exchanges:
            self._trial.clock_ready()


def _reason(text: str) -> str:
    """Printable and short enough for one frame."""
    return "".join(letter if letter.isprintable() else " " for letter in text)[:MAX_REASON]


def _fault_word(code: int) -> str:
    try:
        return FaultCode(code).name.lower().replace("_", " ")
    except ValueError:
        return f"fault {code}"
