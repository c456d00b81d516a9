"""One trial on the wire: tables, arming, clock burst, start, samples, settling."""

from collections import Counter
from collections.abc import Sequence
from typing import Protocol

from drivers.messages import (
    Arm,
    Armed,
    Credit,
    Disarm,
    Finished,
    Greeting,
    Heartbeat,
    Message,
    Refusal,
    Refused,
    Resend,
    RigState,
    Samples,
    Start,
    Started,
    StartMode,
    Table,
)
from trialrunner.conversation.collector import Collector
from trialrunner.conversation.commander import Commander
from trialrunner.conversation.events import (
    Collected,
    RigEvent,
    RigRefused,
    SamplesArrived,
    TrialArmed,
    TrialDisarmed,
    TrialFinished,
    TrialStarted,
)
from trialrunner.conversation.table_sender import TableData, TableSender

_AT_REST = frozenset({RigState.RETURNING, RigState.READY, RigState.SAFE})


class Surroundings(Protocol):
    """What a trial needs of the conversation."""

    heartbeat: Heartbeat | None
    errors: Counter[str]

    def emit(self, event: RigEvent) -> None: ...

    def begin_clock_burst(self) -> None: ...


class TrialTalk:
    """Prepares trials one after the other and collects what they measure."""

    def __init__(
        self, around: Surroundings, commander: Commander, block_bytes: int, resend_rounds: int
    ) -> None:
        self._around = around
        self._commander = commander
        self._resend_rounds = resend_rounds
        self._senders = {
            table: TableSender(
                commander, block_bytes, resend_rounds, self._table_ready, self._table_failed
            )
            for table in Table
        }
        self._greeting: Greeting | None = None
        self.forget()

    def forget(self) -> None:
        """A new session: nothing of the old one counts."""
        self.stop_tables()
        self._tables: list[TableData] = []
        self._pending_tables = 0
        self._wanted: tuple[int, StartMode] | None = None
        self._arm_sent = False
        self._armed: Armed | None = None
        self._collector: Collector | None = None
        self._started = False
        self._asking = False
        self._rounds = 0

    # -- orders -----------------------------------------------------------------------------

    def prepare(
        self, greeting: Greeting, trial: int, tables: Sequence[TableData], start: StartMode
    ) -> None:
        """Bring the tables over, wait until the rig is ready, arm it, exchange clocks."""
        self._greeting = greeting
        self._wanted = (trial, start)
        self._armed, self._arm_sent = None, False
        self._tables = list(tables)
        self._pending_tables = len(self._tables)
        self.stop_tables()
        for table in self._tables:
            self._senders[table.name].send(table, greeting.table_capacity)

    def start_at(self, tick: int) -> None:
        assert self._armed is not None
        self._commander.ask(Start(self._armed.trial, tick), self._on_start)

    def disarm(self) -> None:
        """Give up preparing, or the armed trial unless it already runs."""
        wanted, self._wanted = self._wanted, None
        self.stop_tables()
        if wanted is None or not self._arm_sent:
            self._around.emit(TrialDisarmed())
            return
        self._commander.drop_queue()
        self._commander.ask(Disarm(wanted[0]), self._on_disarm)

    def abandon(self) -> None:
        """Order nothing more for this trial; what still arrives of it is collected."""
        self._wanted = None
        self._commander.drop_queue()
        self.stop_tables()

    def give_up(self) -> Collected | None:
        """What has arrived of the trial under way; nothing more will be collected of it."""
        collector, self._collector = self._collector, None
        return None if collector is None else collector.result(whole=False)

    def stop_tables(self) -> None:
        for sender in self._senders.values():
            sender.stop()

    def next_block(self) -> Message | None:
        """The next table block, if one may be sent."""
        for sender in self._senders.values():
            block = sender.next_block()
            if block is not None:
                return block
        return None

    @property
    def waiting_for_ready(self) -> bool:
        """Only the rig's return keeps the trial from being armed."""
        beat = self._around.heartbeat
        returning = beat is None or beat.state == RigState.RETURNING
        return self._wanted is not None and returning

    @property
    def wants_clock(self) -> bool:
        """Armed, to be started by us, and not yet started: the clock burst goes on."""
        if self._wanted is None or self._armed is None or self._started:
            return False
        return self._wanted[1] is StartMode.DAEMON

    # -- preparing --------------------------------------------------------------------------

    def _table_ready(self) -> None:
        self._pending_tables -= 1
        self.try_arm()

    def _table_failed(self, code: int, text: str) -> None:
        self._wanted = None
        self._around.emit(RigRefused("table", code, text))

    def try_arm(self) -> None:
        """Arm as soon as the tables are there and the rig is ready."""
        beat = self._around.heartbeat
        ready = beat is not None and beat.state == RigState.READY
        if self._wanted is None or self._arm_sent or self._pending_tables or not ready:
            return
        greeting = self._greeting
        assert greeting is not None
        trial, start = self._wanted
        crcs = {table.name: table.crc for table in self._tables}
        reference_crc = crcs.get(Table.REFERENCE, greeting.reference_crc)
        n_samples = self._tables[0].n_samples
        width = greeting.n_outputs + greeting.n_auxiliary
        self._collector = Collector(trial, n_samples, width, greeting.sample_type)
        self._arm_sent, self._started, self._asking, self._rounds = True, False, False, 0
        arm = Arm(trial, n_samples, crcs[Table.FEEDFORWARD], reference_crc, start)
        self._commander.ask(arm, self._on_armed)

    def _on_armed(self, answer: Message) -> None:
        if self._wanted is None:
            return
        if isinstance(answer, Refused) and answer.code == Refusal.NOT_READY:
            # Its heartbeat will say when it is ready again.
            self._arm_sent = False
        elif isinstance(answer, Armed):
            self._armed = answer
            if self._wanted[1] is StartMode.RIG:
                # It may start at any moment, and no tick has to be ordered.
                self.clock_ready()
            else:
                self._around.begin_clock_burst()
        else:
            self._wanted = None
            self._around.emit(_refusal("Arm", answer))

    def clock_ready(self) -> None:
        """The clock burst is complete: the trial may be started."""
        if self._armed is not None and self._wanted is not None:
            self._around.emit(TrialArmed(self._armed.trial, self._armed.start_state))

    def _on_start(self, answer: Message) -> None:
        if isinstance(answer, Refused):
            self._around.emit(_refusal("Start", answer))

    def _on_disarm(self, answer: Message) -> None:
        if isinstance(answer, Refused):
            # It runs already: let it run, the wish waits for the trial boundary.
            return
        self._collector = self._armed = None
        self._around.emit(TrialDisarmed())

    # -- running and settling ---------------------------------------------------------------

    def on_started(self, message: Started) -> None:
        if self._collector is None or message.trial != self._collector.trial or self._started:
            return
        self._started = True
        self._around.emit(TrialStarted(message.trial, message.tick))

    def on_samples(self, block: Samples) -> None:
        if self._collector is None:
            self._around.errors["stale samples"] += 1
            return
        new = self._collector.take(block)
        if new is not None:
            first, count = new
            rows = self._collector.rows(max(first - 1, 0), first + count)
            self._around.emit(SamplesArrived(first, count, rows))

    def on_credit(self, credit: Credit) -> None:
        if credit.table in self._senders:
            self._senders[Table(credit.table)].on_credit(credit)

    def look_for_finish(self, beat: Heartbeat) -> None:
        """The heartbeat shows that the trial is over but its Finished was lost: ask for it."""
        collector = self._collector
        if collector is None or collector.finished is not None or self._asking:
            return
        if self._started and beat.trial == collector.trial and beat.state in _AT_REST:
            self._ask_again(collector, ())

    def on_finished(self, message: Finished) -> None:
        collector = self._collector
        if collector is None or message.trial != collector.trial:
            return
        first_time = collector.finished is None
        collector.finished = message
        self._asking = False
        if first_time:
            self._around.emit(TrialFinished(message.trial))
            self.stop_tables()
        self._settle(collector)

    def _settle(self, collector: Collector) -> None:
        missing = collector.missing()
        whole = not missing and collector.checksum_agrees()
        if not whole and not missing:
            # Every frame had a good checksum and the whole has not: one was stored wrongly.
            collector.forget()
            missing = collector.missing()
        if whole or self._rounds >= self._resend_rounds:
            self._finish_collecting(collector, whole)
            return
        self._rounds += 1
        self._ask_again(collector, missing)

    def _ask_again(self, collector: Collector, spans: tuple[tuple[int, int], ...]) -> None:
        self._asking = True
        collector.asked_again += sum(count for _, count in spans)
        self._commander.ask(Resend(collector.trial, spans), self._on_resend)

    def _on_resend(self, answer: Message) -> None:
        collector = self._collector
        if not isinstance(answer, Refused) or collector is None:
            return
        self._asking = False
        if collector.finished is None:
            self._around.emit(TrialFinished(collector.trial))
        self._finish_collecting(collector, whole=False)

    def _finish_collecting(self, collector: Collector, whole: bool) -> None:
        self._collector = self._armed = self._wanted = None
        self._around.emit(collector.result(whole))


def _refusal(order: str, answer: Message) -> RigRefused:
    if isinstance(answer, Refused):
        return RigRefused(order, answer.code, answer.text)
    return RigRefused(order, 0, f"unexpected answer {type(answer).__name__}")
