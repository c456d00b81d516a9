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
    Arm,
    Armed,
    Bye,
    Clear,
    Credit,
    Disarm,
    Fault,
    FaultCode,
    Finished,
    Halt,
    Heartbeat,
    Message,
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
    decode,
    encode,
)
from trialrunner.conversation.collector import Collector
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
    SamplesArrived,
    SessionClosed,
    TrialArmed,
    TrialDisarmed,
    TrialFinished,
    TrialStarted,
)
from trialrunner.conversation.greeter import Greeter
from trialrunner.conversation.table_sender import TableData, TableSender
from trialrunner.conversation.timing import LinkTiming
from trialrunner.core.clock_sync import ClockSync

SECOND_NS = 1_000_000_000


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
        self._commander = Commander(int(timing.answer_timeout_s * SECOND_NS), timing.max_tries)
        self._greeter = Greeter(self._commander, name, self._emit)
        self._senders = {
            table: TableSender(
                self._commander,
                block_bytes,
                timing.resend_rounds,
                self._table_ready,
                self._table_failed,
            )
            for table in Table
        }
        self.events: deque[RigEvent] = deque()
        self.errors: Counter[str] = Counter()
        """Bad frames by kind, over all sessions."""
        self._urgent: deque[Message] = deque()
        self._now_ns = 0
        self._forget()

    def _forget(self) -> None:
        """State of a session that is no more."""
        self._session = 0
        self.greeted: Greeted | None = None
        self.clock = ClockSync(1)
        self.heartbeat: Heartbeat | None = None
        self._collector: Collector | None = None
        self._tables: list[TableData] = []
        self._wanted: tuple[int, StartMode] | None = None
        self._armed: Armed | None = None
        self._arm_sent = False
        self._asking = False
        self._rounds = 0
        self._ping: tuple[int, int] | None = None
        self._token = 0
        self._halt: Halt | None = None
        self._closing = False
        self._silent = False

    # -- orders -----------------------------------------------------------------------------

    def connect(self, now_ns: int) -> None:
        """Open a new session with the greeting."""
        self._commander.restart()
        for sender in self._senders.values():
            sender.stop()
        self._urgent.clear()
        self._forget()
        self._now_ns = self._heard_ns = self._sent_ns = now_ns
        self._state_since_ns = now_ns
        self._session = self._new_session()
        self._greeter.start()

    def prepare(self, trial: int, tables: Sequence[TableData], start: StartMode) -> None:
        """Bring the tables to the rig, wait until it is ready, arm it, exchange clocks."""
        assert self.greeted is not None
        self._wanted = (trial, start)
        self._armed, self._arm_sent = None, False
        self._state_since_ns = self._now_ns
        self._tables = list(tables)
        for sender in self._senders.values():
            sender.stop()
        self._pending_tables = len(self._tables)
        for table in self._tables:
            self._senders[table.name].send(table, self.greeted.greeting.table_capacity)

    def start_at(self, tick: int) -> None:
        """Start the armed trial at a tick of the rig."""
        assert self._armed is not None
        self._commander.ask(Start(self._armed.trial, tick), self._on_start)

    def disarm(self) -> None:
        """Give up preparing or the armed trial; TrialDisarmed follows unless it already runs."""
        wanted, self._wanted = self._wanted, None
        for sender in self._senders.values():
            sender.stop()
        if wanted is None or self.greeted is None or not self._arm_sent:
            self._emit(TrialDisarmed())
            return
        self._commander.drop_queue()
        self._commander.ask(Disarm(wanted[0]), self._on_disarm)

    def halt(self, category: int, text: str) -> None:
        """To the safe state now; goes ahead of everything and is repeated until it is so."""
        self._halt = Halt(category, text[:100])
        self._halt_again_ns = self._now_ns
        self._wanted = None
        self._commander.drop_queue()
        for sender in self._senders.values():
            sender.stop()

    def clear(self, why: str) -> None:
        """A person asks the rig to leave its safe state."""
        self._halt = None
        self._commander.ask(Clear(why[:100]), self._on_clear)

    def close(self) -> None:
        """Say goodbye; SessionClosed follows."""
        self._closing = True
        self._wanted = None
        self._commander.drop_queue()
        for sender in self._senders.values():
            sender.stop()
        self._commander.ask(Bye(), lambda _: self._emit(SessionClosed()))

    def give_up_trial(self) -> Collected | None:
        """What has arrived of the trial under way; nothing more will be collected of it."""
        collector, self._collector = self._collector, None
        return None if collector is None else collector.result(whole=False)

    # -- frames out -------------------------------------------------------------------------

    def urgent(self) -> list[bytes]:
        """Frames that must go out now, in order."""
        frames = [self._pack(message, 0) for message in self._urgent]
        self._urgent.clear()
        if self._halt is not None and self._now_ns >= self._halt_again_ns and self._session:
            self._halt_again_ns = self._now_ns + int(self._timing.answer_timeout_s * SECOND_NS / 4)
            frames.append(self._pack(self._halt, 0))
        due = self._commander.due(self._now_ns) if self._session else None
        if due is not None:
            frames.append(self._pack(*due))
        if frames:
            self._sent_ns = self._now_ns
        return frames

    def bulk(self) -> bytes | None:
        """The next table block, to be asked for only while the line is idle."""
        for sender in self._senders.values():
            block = sender.next_block()
            if block is not None:
                self._sent_ns = self._now_ns
                return self._pack(block, 0)
        return None

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
        if self._commander.exhausted:
            self._fall_silent(f"the rig does not answer {self._commander.under_way}")
        elif self.greeted and now_ns - self._heard_ns > self._timing.silence_s * SECOND_NS:
            self._fall_silent(f"nothing was heard from the rig for {self._timing.silence_s:g} s")
        elif self._waiting_for_ready() and now_ns > self._ready_deadline_ns():
            self._fall_silent(
                f"the rig was not ready again within {self._timing.ready_timeout_s:g} s"
            )
        elif self.greeted:
            self._keep_talking()

    def next_wake_ns(self) -> int:
        """When `advance` is wanted next, if no frame comes before."""
        quarter = self._alive_interval_ns()
        wakes = [self._sent_ns + quarter, self._now_ns + quarter]
        if self._halt is not None:
            wakes.append(self._halt_again_ns)
        again = self._commander.next_wake_ns()
        if again is not None:
            wakes.append(again)
        if self._ping is not None:
            wakes.append(self._ping[1] + int(self._timing.answer_timeout_s * SECOND_NS))
        return min(wakes)

    def _alive_interval_ns(self) -> int:
        watchdog_ms = 1000 if self.greeted is None else self.greeted.greeting.watchdog_ms
        return max(watchdog_ms, 20) * SECOND_NS // 4000

    def _ready_deadline_ns(self) -> int:
        return self._state_since_ns + int(self._timing.ready_timeout_s * SECOND_NS)

    def _waiting_for_ready(self) -> bool:
        returning = self.heartbeat is None or self.heartbeat.state == RigState.RETURNING
        return self._wanted is not None and returning

    def _fall_silent(self, text: str) -> None:
        self._silent = True
        self._emit(RigSilent(text))

    def _keep_talking(self) -> None:
        if self._ping is not None:
            if self._now_ns - self._ping[1] > self._timing.answer_timeout_s * SECOND_NS:
                self._send_ping()
        elif self._now_ns - self._sent_ns >= self._alive_interval_ns():
            # A ping keeps us audible and the clocks together; Alive serves where a ping is out.
            self._send_ping() if self.clock.fresh else self._urgent.append(Alive())

    # -- messages of the rig ----------------------------------------------------------------

    def _emit(self, event: RigEvent) -> None:
        if isinstance(event, Greeted):
            self.greeted = event
            greeting = event.greeting
            self.clock = ClockSync(greeting.tick_hz, greeting.clock_steps)
        self.events.append(event)

    def _dispatch(self, message: Message) -> None:
        if isinstance(message, ANSWERS):
            if not self._commander.answered(message.number, message):
                self.errors["stale answer"] += 1
        elif isinstance(message, Samples):
            self._on_samples(message)
        elif self.greeted is None:
            self.errors["before greeting"] += 1
        else:
            self._on_report(message)

    def _on_report(self, message: Message) -> None:
        match message:
            case Heartbeat():
                self._on_heartbeat(message)
            case Pong():
                self._on_pong(message)
            case Started():
                self._on_started(message)
            case Finished():
                self._on_finished(message)
            case Credit():
                if message.table in self._senders:
                    self._senders[Table(message.table)].on_credit(message)
            case Fault():
                self._emit(RigFaulted(message.code, message.text))
            case _:
                self.errors["wrong direction"] += 1

    def _on_heartbeat(self, beat: Heartbeat) -> None:
        before, self.heartbeat = self.heartbeat, beat
        if beat.state not in list(RigState):
            self.errors["state"] += 1
            return
        if before is None or before.state != beat.state:
            self._state_since_ns = self._now_ns
            self._emit(RigChanged(RigState(beat.state)))
            if beat.state == RigState.SAFE and self._halt is None:
                self._emit(RigFaulted(beat.fault, f"the rig reports {_fault_word(beat.fault)}"))
        if beat.state == RigState.SAFE:
            self._halt = None
        self._try_arm()
        self._look_for_finish(beat)

    def _look_for_finish(self, beat: Heartbeat) -> None:
        """The heartbeat shows that the trial is over but its Finished was lost: ask for it."""
        collector = self._collector
        over = beat.state in (RigState.RETURNING, RigState.READY, RigState.SAFE)
        if collector is None or collector.finished is not None or not over or self._asking:
            return
        if beat.trial == collector.trial and self._started:
            self._ask_again(())

    # -- preparing and starting -------------------------------------------------------------

    def _table_ready(self) -> None:
        self._pending_tables -= 1
        self._try_arm()

    def _table_failed(self, code: int, text: str) -> None:
        self._wanted = None
        self._emit(RigRefused("table", code, text))

    def _try_arm(self) -> None:
        ready = self.heartbeat is not None and self.heartbeat.state == RigState.READY
        if self._wanted is None or self._arm_sent or self._pending_tables or not ready:
            return
        assert self.greeted is not None
        trial, start = self._wanted
        crcs = {table.name: table.crc for table in self._tables}
        n_samples = self._tables[0].n_samples
        owned = self.greeted.greeting.reference_crc
        arm = Arm(
            trial, n_samples, crcs[Table.FEEDFORWARD], crcs.get(Table.REFERENCE, owned), start
        )
        greeting = self.greeted.greeting
        width = greeting.n_outputs + greeting.n_auxiliary
        self._collector = Collector(trial, n_samples, width, greeting.sample_type)
        self._arm_sent, self._started, self._asking, self._rounds = True, False, False, 0
        self._commander.ask(arm, self._on_armed)

    def _on_armed(self, answer: Message) -> None:
        if isinstance(answer, Refused) and answer.code == Refusal.NOT_READY:
            self._arm_sent = False
            return
        if not isinstance(answer, Armed) or self._wanted is None:
            self._refused("Arm", answer)
            return
        self._armed = answer
        self.clock.restart()
        self._send_ping()

    def _send_ping(self) -> None:
        self._token = (self._token + 1) % 2**32
        self._ping = (self._token, self._now_ns)
        self._urgent.append(Ping(self._token, self._now_ns))

    def _on_pong(self, pong: Pong) -> None:
        if self._ping is None or pong.token != self._ping[0] or pong.sent_ns != self._ping[1]:
            self.errors["stale pong"] += 1
            return
        self._ping = None
        self.clock.add(pong.sent_ns, pong.received_tick, pong.answered_tick, self._now_ns)
        if self._armed is None or self._wanted is None:
            return
        if self.clock.fresh < self._timing.clock_exchanges:
            self._send_ping()
        elif self.clock.fresh == self._timing.clock_exchanges:
            self._emit(TrialArmed(self._armed.trial, self._armed.start_state))

    def _on_start(self, answer: Message) -> None:
        if isinstance(answer, Refused):
            self._emit(RigRefused("Start", answer.code, answer.text))

    def _on_disarm(self, answer: Message) -> None:
        if isinstance(answer, Refused):
            # It runs already: let it run, the wish waits for the trial boundary.
            return
        self._collector = self._armed = None
        self._emit(TrialDisarmed())

    def _on_clear(self, answer: Message) -> None:
        if isinstance(answer, Refused):
            self._emit(RigRefused("Clear", answer.code, answer.text))
        else:
            self._emit(RigCleared())

    def _refused(self, order: str, answer: Message) -> None:
        self._wanted = None
        if isinstance(answer, Refused):
            self._emit(RigRefused(order, answer.code, answer.text))
        else:
            self._emit(RigRefused(order, 0, f"unexpected answer {type(answer).__name__}"))

    # -- the trial --------------------------------------------------------------------------

    def _on_started(self, message: Started) -> None:
        if self._collector is None or message.trial != self._collector.trial or self._started:
            return
        self._started = True
        self._emit(TrialStarted(message.trial, message.tick))

    def _on_samples(self, block: Samples) -> None:
        if self._collector is None:
            self.errors["stale samples"] += 1
            return
        new = self._collector.take(block)
        if new is not None:
            self._emit(SamplesArrived(*new))

    def _on_finished(self, message: Finished) -> None:
        collector = self._collector
        if collector is None or message.trial != collector.trial or self._armed is None:
            return
        first_time = collector.finished is None
        collector.finished = message
        self._asking = False
        if first_time:
            self._emit(TrialFinished(message.trial))
            for sender in self._senders.values():
                sender.stop()
        self._settle(collector)

    def _settle(self, collector: Collector) -> None:
        missing = collector.missing()
        whole = not missing and collector.checksum_agrees()
        if whole or self._rounds >= self._timing.resend_rounds:
            if not whole and not missing:
                collector.forget()
            self._finish_collecting(collector, whole)
            return
        if not missing:
            # Every frame had a good checksum and the whole has not: one was stored wrongly.
            collector.forget()
            missing = collector.missing()
        self._rounds += 1
        self._ask_again(missing)

    def _ask_again(self, spans: tuple[tuple[int, int], ...]) -> None:
        assert self._collector is not None
        self._asking = True
        self._collector.asked_again += sum(count for _, count in spans)
        self._commander.ask(Resend(self._collector.trial, spans), self._on_resend)

    def _on_resend(self, answer: Message) -> None:
        collector = self._collector
        if isinstance(answer, Refused) and collector is not None:
            self._asking = False
            if collector.finished is None:
                self._emit(TrialFinished(collector.trial))
            self._finish_collecting(collector, whole=False)

    def _finish_collecting(self, collector: Collector, whole: bool) -> None:
        self._collector = self._armed = self._wanted = None
        self._emit(collector.result(whole))


def _fault_word(code: int) -> str:
    try:
        return FaultCode(code).name.lower().replace("_", " ")
    except ValueError:
        return f"fault {code}"
