"""The rig's side of PROTOCOL.md, without I/O: frames and time in, frames and time out."""

from collections import Counter
from collections.abc import Callable

import numpy as np

from drivers.codec import Frame, unpack_frame
from drivers.errors import WireError
from drivers.messages import (
    NUMBERED,
    Alive,
    Arm,
    Bye,
    Channel,
    Clear,
    Describe,
    Disarm,
    Done,
    Fault,
    FaultCode,
    FinishReason,
    Greeting,
    Halt,
    Hello,
    Message,
    Ping,
    Pong,
    Refusal,
    Refused,
    Resend,
    RigState,
    Role,
    Start,
    Table,
    TableBlock,
    TableClose,
    TableOpen,
    TableState,
    decode,
)
from drivers.tables import table_crc
from mock_rig.clock import SECOND_NS, RigClock
from mock_rig.faults import FaultScript
from mock_rig.options import RigOptions
from mock_rig.plant import TICK_HZ, ChannelInfo, Plant
from mock_rig.runner import Runner
from mock_rig.sender import Sender
from mock_rig.tables import RowLimits, StoredTable

Handler = Callable[[Message, int, int], Message]


class Responder:
    """One rig. Drive it with `receive`, `advance`, `outgoing` and `next_wake_ns`."""

    def __init__(
        self,
        plant: Plant,
        options: RigOptions,
        script: FaultScript,
        max_body: int,
        block_bytes: int,
        now_ns: int,
    ) -> None:
        self.plant = plant
        self.options = options
        self.errors: Counter[str] = Counter()
        """Frames and messages not taken, by kind."""
        self.sender = Sender()
        self.clock = RigClock(TICK_HZ, options.fast)
        self.tables: dict[Table, StoredTable] = {}
        self.runner = Runner(self, script, block_bytes)
        self._max_body = max_body
        self._resting = False
        """After Bye: nothing is said, and only Hello is heard."""
        self._last = 0
        self._stored: Message | None = None
        self._heard_ns = now_ns
        self._beat_ns = now_ns
        self._handlers: dict[type[Message], Handler] = {
            Describe: self._on_describe,
            TableOpen: self._on_table_open,
            TableClose: self._on_table_close,
            Arm: self.runner.on_arm,
            Start: self.runner.on_start,
            Disarm: self.runner.on_disarm,
            Resend: self.runner.on_resend,
            Clear: self.runner.on_clear,
            Bye: self._on_bye,
        }

    # -- in ---------------------------------------------------------------------------------

    def receive(self, data: bytes, peer: int, now_ns: int) -> None:
        """Take one frame; what is wrong with it is counted and nothing else happens."""
        try:
            frame = unpack_frame(data, self._max_body)
            message = decode(frame.body)
        except WireError as error:
            self.errors[error.kind] += 1
            return
        if isinstance(message, Hello):
            self._on_hello(message, frame, peer, now_ns)
        elif self.sender.session is None or frame.session != self.sender.session:
            self.errors["session"] += 1
        elif isinstance(message, NUMBERED):
            self._hear(peer, now_ns)
            self._on_numbered(message, frame.sequence, now_ns)
        elif self._resting:
            self.errors["resting"] += 1
        else:
            self._hear(peer, now_ns)
            self._on_unnumbered(message, now_ns)

    def _hear(self, peer: int, now_ns: int) -> None:
        """A frame of the session; its peer may have another number after it connected anew."""
        self._heard_ns = now_ns
        self.sender.peer = peer

    def _on_numbered(self, message: Message, number: int, now_ns: int) -> None:
        """Last + 1 is carried out, last is answered again, everything else is ignored."""
        if number == self._last and self._stored is not None:
            self.sender.send(self._stored, now_ns)
        elif number != self._last + 1:
            self.errors["number"] += 1
        elif self._resting:
            self.errors["resting"] += 1
        else:
            answer = self._handlers[type(message)](message, number, now_ns)
            self._last, self._stored = number, answer
            self.sender.send(answer, now_ns)
            if isinstance(message, TableOpen) and isinstance(answer, TableState):
                self._send_credit(self.tables[Table(message.table)], now_ns)

    def _send_credit(self, table: StoredTable, now_ns: int) -> None:
        if table.hungry:
            self.sender.send(table.credit(), now_ns)

    def _on_unnumbered(self, message: Message, now_ns: int) -> None:
        match message:
            case Ping():
                tick = self.clock.tick(now_ns)
                self.sender.send(Pong(message.token, message.sent_ns, tick, tick), now_ns)
            case TableBlock():
                self._on_block(message, now_ns)
            case Halt():
                self.runner.go_safe(FaultCode.HALTED, FinishReason.HALTED, message.text, now_ns)
                # It is repeated until a heartbeat says so: the last one may have been lost.
                self.beat(now_ns)
            case Alive():
                pass
            case _:
                self.errors["wrong direction"] += 1

    def _on_hello(self, message: Hello, frame: Frame, peer: int, now_ns: int) -> None:
        if frame.sequence != 1:
            self.errors["number"] += 1
            return
        if frame.session == self.sender.session and peer == self.sender.peer:
            if self._last == 1 and self._stored is not None:
                self.sender.send(self._stored, now_ns)
            return
        common = set(message.versions) & set(self.options.versions)
        refused = None
        if peer != self.sender.peer and self._alive(now_ns):
            refused = Refused(1, Refusal.BUSY, "a session with another daemon is alive")
        elif not common:
            spoken = ", ".join(map(str, self.options.versions))
            refused = Refused(1, Refusal.VERSION, f"this rig speaks protocol version {spoken}")
        if refused is not None:
            self.sender.send(refused, now_ns, frame.session, peer)
            return
        self.sender.forget()
        self.sender.session, self.sender.peer = frame.session, peer
        self._heard_ns, self._resting = now_ns, False
        self.tables.clear()
        self._last, self._stored = 1, self._greeting(max(common))
        self.sender.send(self._stored, now_ns)
        self.runner.new_session(now_ns)
        self.beat(now_ns)

    def _alive(self, now_ns: int) -> bool:
        """A session is open and its daemon was heard a moment ago."""
        silence_ns = now_ns - self._heard_ns
        heard = silence_ns < self.options.watchdog_ms * 1_000_000
        return self.sender.session is not None and not self._resting and heard

    def _greeting(self, version: int) -> Greeting:
        plant, options = self.plant, self.options
        reference = options.reference
        return Greeting(
            number=1,
            version=version,
            name=f"mock {plant.name}",
            tick_hz=TICK_HZ,
            period_ticks=plant.period_ticks,
            clock_steps=options.fast,
            sample_type=options.sample_type,
            table_capacity=options.table_capacity,
            max_samples=options.max_samples,
            samples_kept=options.max_samples if options.samples_kept else 0,
            watchdog_ms=options.watchdog_ms,
            starts=(0, 1) if options.rig_starts else (0,),
            inject=plant.inject,
            reference_owner="daemon" if reference is None else "rig",
            reference_crc=0 if reference is None else self._own_crc(),
            n_inputs=len(plant.inputs),
            n_outputs=len(plant.outputs),
            n_auxiliary=len(plant.auxiliary),
        )

    def _own_crc(self) -> int:
        data = np.ascontiguousarray(self.options.reference, dtype=f"<{self.options.sample_type}")
        return table_crc(data.tobytes())

    def _on_describe(self, message: Message, number: int, now_ns: int) -> Message:
        assert isinstance(message, Describe)
        lists: dict[int, tuple[ChannelInfo, ...]] = {
            Role.INPUT: self.plant.inputs,
            Role.OUTPUT: self.plant.outputs,
            Role.AUXILIARY: self.plant.auxiliary,
        }
        channels = lists.get(message.role, ())
        if message.index >= len(channels):
            return Refused(number, Refusal.UNSUPPORTED, "there is no such channel")
        one = channels[message.index]
        return Channel(
            number, message.role, message.index, one.name, one.unit, one.low, one.high,
            one.rate_per_s, one.meaning,
        )  # fmt: skip

    # -- tables -----------------------------------------------------------------------------

    def _on_table_open(self, message: Message, number: int, now_ns: int) -> Message:
        assert isinstance(message, TableOpen)
        trouble = self._table_trouble(message)
        if trouble:
            return Refused(number, *trouble)
        name = Table(message.table)
        held = self.tables.get(name)
        shape = (message.n_samples, message.n_channels, message.crc, message.streamed)
        if held is not None and held.verified and not message.streamed:
            before = held.opened
            if shape == (before.n_samples, before.n_channels, before.crc, before.streamed):
                held.opened = message
                return TableState(number, name, message.revision, True, ())
        options = self.options
        self.tables[name] = StoredTable(
            message, options.sample_type, options.table_capacity, self.row_limits(name)
        )
        return TableState(number, name, message.revision, False, ())

    def _table_trouble(self, message: TableOpen) -> tuple[int, str] | None:
        if message.table not in list(Table):
            return Refusal.UNSUPPORTED, f"there is no table {message.table}"
        if self.runner.state in (RigState.ARMED, RigState.RUNNING):
            return Refusal.NOT_READY, "a trial is armed or running"
        own_reference = message.table == Table.REFERENCE and self.options.reference is not None
        if own_reference:
            return Refusal.UNSUPPORTED, "this rig has its own reference"
        widths = {
            Table.FEEDFORWARD: len(self.plant.inputs),
            Table.REFERENCE: len(self.plant.outputs),
        }
        width = widths[Table(message.table)]
        if message.n_channels != width:
            return Refusal.MALFORMED, f"{message.n_channels} channels; this table has {width}"
        if not message.n_samples:
            return Refusal.MALFORMED, "a table without samples"
        if message.n_samples > self.options.max_samples:
            return Refusal.TOO_LARGE, f"takes at most {self.options.max_samples} samples"
        if message.n_samples > self.options.table_capacity and not message.streamed:
            return (
                Refusal.TOO_LARGE,
                f"holds {self.options.table_capacity} samples; stream the rest",
            )
        return None

    def _on_block(self, block: TableBlock, now_ns: int) -> None:
        table = self.tables.get(Table(block.table)) if block.table in list(Table) else None
        if table is None or table.opened.revision != block.revision:
            self.errors["stale block"] += 1
        elif not table.take(block):
            self.errors["block"] += 1
            if table.misses(block.first) and not table.gap_told:
                # Told twice, so that a lost credit does not hide the gap; then not again.
                table.gap_told = True
                self.sender.send(table.credit(), now_ns)
                self.sender.send(table.credit(), now_ns)
        elif table.trouble:
            self.runner.beyond_limit(table.trouble, now_ns)
        elif table.opened.streamed and table.ready and self.runner.state != RigState.RUNNING:
            self.sender.send(table.credit(), now_ns)

    def _on_table_close(self, message: Message, number: int, now_ns: int) -> Message:
        assert isinstance(message, TableClose)
        table = self.tables.get(Table(message.table)) if message.table in list(Table) else None
        if table is None or table.opened.revision != message.revision or table.opened.streamed:
            return Refused(number, Refusal.MALFORMED, "no table of that revision is open")
        table.close()
        if table.trouble:
            name = Table(message.table).name.lower()
            return Refused(number, Refusal.BEYOND_LIMIT, f"{name}: {table.trouble}")
        return TableState(number, message.table, message.revision, table.verified, table.missing())

    def row_limits(self, table: Table) -> RowLimits:
        """What the rig demands of a table, whatever the daemon thinks."""
        plant = self.plant
        channels = plant.inputs if table is Table.FEEDFORWARD else plant.outputs
        period_s = plant.period_ticks / TICK_HZ
        return RowLimits(
            np.array([one.low for one in channels]),
            np.array([one.high for one in channels]),
            np.array([one.rate_per_s * period_s for one in channels]),
        )

    def drop_used_tables(self) -> None:
        """Streamed tables that were played: nobody may play the rest of them by mistake."""
        self.tables = {name: table for name, table in self.tables.items() if not table.used}

    def _on_bye(self, message: Message, number: int, now_ns: int) -> Message:
        self.runner.rest(now_ns)
        self._resting = True
        return Done(number)

    # -- time and out -----------------------------------------------------------------------

    def advance(self, now_ns: int, room: bool = True) -> None:
        """Let time pass: move, sample, beat, watch.

        `room`: the line takes more. Without it a rig that jumps through time waits, so that it is
        as fast as its line and not faster; one that keeps the host's time cannot wait.
        """
        silence_ns = now_ns - self._heard_ns
        if self.runner.watched and silence_ns > self.options.watchdog_ms * 1_000_000:
            text = f"nothing heard for {silence_ns / SECOND_NS:.3g} s"
            self.runner.go_safe(FaultCode.WATCHDOG, FinishReason.HALTED, text, now_ns)
        self.runner.advance(now_ns, room)
        if now_ns >= self._beat_ns:
            self.beat(now_ns)

    def beat(self, now_ns: int) -> None:
        """A heartbeat; with it the credit of tables that are being streamed."""
        self._beat_ns = now_ns + self.options.watchdog_ms * 1_000_000 // 5
        if self._resting or self.sender.session is None:
            return
        self.sender.send(self.runner.heartbeat(now_ns), now_ns)
        for table in self.tables.values():
            self._send_credit(table, now_ns)

    def fault(self, code: FaultCode, text: str, now_ns: int) -> None:
        self.sender.send(Fault(code, text[:200], self.clock.tick(now_ns)), now_ns)

    def outgoing(self, now_ns: int) -> list[tuple[bytes, int]]:
        """Frames to write now, each with its peer."""
        return self.sender.take(now_ns)

    def next_wake_ns(self, now_ns: int, room: bool = True) -> int:
        """When `advance` shall be called next, if no frame comes and the line does not change."""
        wakes = [self._beat_ns]
        for wake in (self.sender.next_wake_ns(), self.runner.next_wake_ns(now_ns, room)):
            if wake is not None:
                wakes.append(wake)
        return min(wakes)
