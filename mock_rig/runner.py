"""What the rig does: return, ready, armed, running, safe; pure."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import islice
from typing import TYPE_CHECKING

from drivers.messages import (
    Arm,
    Armed,
    Clear,
    Disarm,
    Done,
    FaultCode,
    Finished,
    FinishReason,
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
from mock_rig.clock import SECOND_NS
from mock_rig.faults import FaultScript
from mock_rig.plant import TICK_HZ
from mock_rig.trial import Trial

if TYPE_CHECKING:
    from mock_rig.responder import Responder

UNDERRUN_PATIENCE_NS = 500_000_000
"""A rig whose time jumps waits so long for a streamed block before it counts as an underrun."""

MAX_AHEAD_S = 3600
"""A start further ahead than this is a mistake."""

AGAIN_BLOCKS = 16
"""Blocks asked for once more that are handed out in one go."""


class Crash(Exception):
    """The rig dies; `away_s` later it may come back."""

    def __init__(self, away_s: float) -> None:
        super().__init__(f"crash, away for {away_s:g} s")
        self.away_s = away_s


class Runner:
    """States and trials of one rig."""

    def __init__(self, rig: Responder, script: FaultScript, block_bytes: int) -> None:
        self._rig = rig
        self._script = script
        self._block_bytes = block_bytes
        self.state = RigState.READY
        self._fault = FaultCode.NONE
        self._trial: Trial | None = None
        self._start_mode = StartMode.DAEMON
        self._start_tick: int | None = None
        self._back_tick = 0
        self._emitted_ns = 0
        self._starved_ns: int | None = None
        self._released_ns = 0
        self._kept = False
        """The last trial is over and may be asked for once more."""
        self._again: Iterator[Samples] | None = None
        """Blocks that were asked for once more and wait for room on the line."""

    @property
    def watched(self) -> bool:
        """The watchdog is awake."""
        return self.state in (RigState.ARMED, RigState.RUNNING)

    # -- orders -----------------------------------------------------------------------------

    def new_session(self, now_ns: int) -> None:
        """Whoever greets anew knows nothing of an old trial: stop it and come back."""
        self._kept = False
        self.rest(now_ns)

    def rest(self, now_ns: int) -> None:
        self._again = None
        if self.watched:
            self._return(now_ns)

    def on_arm(self, message: Message, number: int, now_ns: int) -> Message:
        assert isinstance(message, Arm)
        if self.state is RigState.SAFE:
            return Refused(number, Refusal.SAFE_STATE, "the rig is in its safe state")
        if self.state is not RigState.READY:
            return Refused(number, Refusal.NOT_READY, "the rig is not at its start")
        known = (StartMode.DAEMON, *([StartMode.RIG] if self._rig.options.rig_starts else []))
        if message.start not in known:
            text = f"start {message.start} is not among those of the greeting"
            return Refused(number, Refusal.UNSUPPORTED, text)
        for table in self._rig.tables.values():
            if table.trouble:
                return Refused(number, Refusal.BEYOND_LIMIT, table.trouble)
        trouble = self._table_trouble(message)
        if trouble:
            return Refused(number, Refusal.TABLE_UNVERIFIED, trouble)
        self._begin(message, now_ns)
        assert self._trial is not None
        tick = self._rig.clock.tick(now_ns)
        return Armed(number, message.trial, tick, self._trial.start_state)

    def _begin(self, message: Arm, now_ns: int) -> None:
        rig = self._rig
        self._again, self._kept = None, False
        self._trial = Trial(
            rig.plant,
            message.trial,
            message.n_samples,
            self._first_reference(),
            self._script,
            rig.options.sample_type,
        )
        rig.sender.arm(self._trial.faults, self._script.source(message.trial))
        self._start_mode = StartMode(message.start)
        self._start_tick = self._starved_ns = None
        self._enter(RigState.ARMED, now_ns)
        if self._start_mode is StartMode.RIG and "missed_start" not in self._trial.faults:
            wait = round(rig.options.rig_start_s * TICK_HZ)
            self._start_tick = rig.clock.tick(now_ns) + wait

    def _table_trouble(self, message: Arm) -> str:
        wanted = {Table.FEEDFORWARD: message.feedforward_crc}
        if self._rig.options.reference is None:
            wanted[Table.REFERENCE] = message.reference_crc
        elif len(self._rig.options.reference) != message.n_samples:
            return f"the rig's reference has {len(self._rig.options.reference)} samples"
        for name, crc in wanted.items():
            table = self._rig.tables.get(name)
            if table is None or not table.ready or table.opened.crc != crc:
                return f"the table {name.name.lower()} is not here as announced"
            if table.opened.n_samples != message.n_samples:
                return f"the table {name.name.lower()} has {table.opened.n_samples} samples"
        return ""

    def on_start(self, message: Message, number: int, now_ns: int) -> Message:
        assert isinstance(message, Start)
        trial = self._trial
        if trial is None or self.state is not RigState.ARMED or trial.number != message.trial:
            return Refused(number, Refusal.WRONG_TRIAL, "that trial is not armed")
        ahead = message.tick - self._rig.clock.tick(now_ns)
        if ahead <= 0:
            return Refused(number, Refusal.TOO_LATE, f"tick {message.tick} is over")
        if ahead > MAX_AHEAD_S * TICK_HZ:
            text = f"tick {message.tick} is over {MAX_AHEAD_S} s ahead"
            return Refused(number, Refusal.MALFORMED, text)
        late = round(trial.faults.get("late_start", 0.0) * TICK_HZ)
        if "missed_start" not in trial.faults:
            self._start_tick = message.tick + late
        return Done(number)

    def on_disarm(self, message: Message, number: int, now_ns: int) -> Message:
        assert isinstance(message, Disarm)
        if self.state is RigState.RUNNING:
            return Refused(number, Refusal.NOT_READY, "the trial runs already")
        if self.state is RigState.ARMED:
            self._enter(RigState.READY, now_ns)
        return Done(number)

    def on_resend(self, message: Message, number: int, now_ns: int) -> Message:
        assert isinstance(message, Resend)
        trial = self._trial
        enough = self._rig.options.samples_kept or not message.spans
        if trial is None or trial.number != message.trial or not (self._kept and enough):
            return Refused(number, Refusal.NOT_KEPT, "samples of that trial are not kept")
        self._again = trial.again(message.spans, self._block_bytes)
        return Done(number)

    def _send_again(self, now_ns: int) -> None:
        """Some of the blocks that were asked for; after the last one Finished."""
        assert self._again is not None
        assert self._trial is not None
        blocks = list(islice(self._again, AGAIN_BLOCKS))
        self._rig.sender.send_blocks(blocks, now_ns, spoil=False)
        if len(blocks) < AGAIN_BLOCKS:
            self._again = None
            self._rig.sender.send(self._finished(self._trial), now_ns)

    def on_clear(self, message: Message, number: int, now_ns: int) -> Message:
        assert isinstance(message, Clear)
        if self.state is RigState.SAFE:
            if now_ns < self._released_ns:
                return Refused(number, Refusal.SAFE_STATE, "the emergency stop is still pressed")
            self._fault = FaultCode.NONE
            self._return(now_ns)
        return Done(number)

    def go_safe(self, code: FaultCode, reason: FinishReason, text: str, now_ns: int) -> None:
        """To the safe state, latched until Clear; a running trial is over."""
        if self.state is RigState.SAFE:
            return
        running = self.state is RigState.RUNNING
        self._fault = code
        self._enter(RigState.SAFE, now_ns)
        if running and self._trial is not None:
            self._finish(reason, now_ns)
        self._rig.drop_used_tables()
        self._rig.fault(code, text, now_ns)

    def beyond_limit(self, text: str, now_ns: int) -> None:
        """A streamed table breaks the limits after it was armed: nothing of it may be played."""
        if self.watched:
            self.go_safe(FaultCode.BEYOND_LIMIT, FinishReason.FAULT, text, now_ns)

    # -- time -------------------------------------------------------------------------------

    def advance(self, now_ns: int, room: bool) -> None:
        if self._again is not None and room:
            self._send_again(now_ns)
        tick = self._rig.clock.tick(now_ns)
        if self.state is RigState.RETURNING:
            if self._rig.clock.fast:
                self._rig.clock.jump_to(self._back_tick, now_ns)
                tick = self._rig.clock.tick(now_ns)
            if tick >= self._back_tick:
                self._enter(RigState.READY, now_ns)
        elif self.state is RigState.ARMED and self._start_tick is not None:
            if self._rig.clock.fast:
                self._rig.clock.jump_to(self._start_tick, now_ns)
                tick = self._rig.clock.tick(now_ns)
            if tick >= self._start_tick:
                self._start(now_ns)
        if self.state is RigState.RUNNING and (room or not self._rig.clock.fast):
            self._run(now_ns)

    def _start(self, now_ns: int) -> None:
        trial = self._trial
        assert trial is not None
        assert self._start_tick is not None
        trial.start_tick = self._start_tick
        self._emitted_ns = now_ns
        self._enter(RigState.RUNNING, now_ns)
        self._rig.sender.send(Started(trial.number, trial.start_tick), now_ns)
        if "silence" in trial.faults:
            self._rig.sender.silent_until_ns = now_ns + int(
                min(trial.faults["silence"], 1e9) * SECOND_NS
            )

    def _run(self, now_ns: int) -> None:
        trial = self._trial
        assert trial is not None
        for _ in range(self._due(trial, now_ns)):
            if not self._sample(trial, now_ns) or self._strike(trial, now_ns) or trial.over:
                break
        if self._rig.clock.fast:
            there = trial.start_tick + trial.count * self._rig.plant.period_ticks
            self._rig.clock.jump_to(there, now_ns)
        if self.state is not RigState.RUNNING:
            return
        old = now_ns - self._emitted_ns > self._rig.options.watchdog_ms * 1_000_000 // 4
        blocks = trial.blocks(self._block_bytes, everything=old or trial.over)
        if blocks:
            self._emitted_ns = now_ns
        self._rig.sender.send_blocks(blocks, now_ns, spoil=True)
        for table in self._rig.tables.values():
            if table.opened.streamed and table.credit_due:
                self._rig.sender.send(table.credit(), now_ns)
        if trial.over:
            self._end(trial, now_ns)

    def _due(self, trial: Trial, now_ns: int) -> int:
        """Samples to take now."""
        if self._rig.clock.fast:
            return self._rig.options.chunk
        passed = self._rig.clock.tick(now_ns) - trial.start_tick
        return passed // self._rig.plant.period_ticks + 1 - trial.count

    def _sample(self, trial: Trial, now_ns: int) -> bool:
        """Take one sample; false if a streamed table ran dry."""
        feedforward = self._rig.tables[Table.FEEDFORWARD].row(trial.count)
        reference = self._reference(trial.count)
        if feedforward is None or reference is None:
            self._starve(now_ns)
            return False
        self._starved_ns = None
        trial.advance(feedforward, reference)
        return True

    def _starve(self, now_ns: int) -> None:
        if self._starved_ns is None:
            self._starved_ns = now_ns
        if self._rig.clock.fast and now_ns - self._starved_ns < UNDERRUN_PATIENCE_NS:
            return
        text = "a streamed table ran dry"
        self.go_safe(FaultCode.UNDERRUN, FinishReason.UNDERRUN, text, now_ns)

    def _strike(self, trial: Trial, now_ns: int) -> bool:
        """Faults that end the trial in its middle; true if one did."""
        half = max(1, trial.n_samples // 2)
        if "crash" in trial.faults and trial.count == half:
            raise Crash(trial.faults["crash"])
        if "emergency_stop" in trial.faults and trial.count == half:
            self._released_ns = now_ns + int(trial.faults["emergency_stop"] * SECOND_NS)
            text = "the emergency stop was pressed"
            self.go_safe(FaultCode.EMERGENCY_STOP, FinishReason.FAULT, text, now_ns)
            return True
        share = trial.faults.get("drive_fault", 2.0)
        if trial.count == max(1, int(share * trial.n_samples)):
            self.go_safe(FaultCode.DRIVE, FinishReason.FAULT, "the drive tripped", now_ns)
            return True
        return False

    def _end(self, trial: Trial, now_ns: int) -> None:
        for name, table in self._rig.tables.items():
            whole = trial.count == trial.n_samples
            if whole and table.played_crc(trial.count) != table.opened.crc:
                text = f"the {name.name.lower()} that was played has another checksum"
                self.go_safe(FaultCode.INTERNAL, FinishReason.FAULT, text, now_ns)
                return
        self._finish(trial.reason, now_ns)
        self._return(now_ns)

    def _finish(self, reason: FinishReason, now_ns: int) -> None:
        trial = self._trial
        assert trial is not None
        trial.reason, self._kept = reason, True
        trial.feedforward_crc = self._rig.tables[Table.FEEDFORWARD].played_crc(trial.count)
        blocks = trial.blocks(self._block_bytes, everything=True)
        self._rig.sender.send_blocks(blocks, now_ns, spoil=True)
        self._rig.sender.send(self._finished(trial), now_ns)

    def _finished(self, trial: Trial) -> Finished:
        return Finished(
            trial.number,
            trial.reason,
            trial.count,
            trial.start_tick,
            trial.crc(),
            trial.feedforward_crc,
            trial.start_state,
        )

    def _return(self, now_ns: int) -> None:
        """Bring itself back to its start; what it measures on the way concerns nobody."""
        self._rig.drop_used_tables()
        self._back_tick = self._rig.clock.tick(now_ns) + round(self._rig.plant.return_s * TICK_HZ)
        self._enter(RigState.RETURNING, now_ns)

    def _enter(self, state: RigState, now_ns: int) -> None:
        self.state = state
        self._rig.beat(now_ns)

    def heartbeat(self, now_ns: int) -> Heartbeat:
        trial = self._trial
        return Heartbeat(
            self.state,
            0 if trial is None else trial.number,
            0 if trial is None else trial.count,
            self._rig.clock.tick(now_ns),
            self._fault,
        )

    def _first_reference(self) -> list[float]:
        own = self._rig.options.reference
        row = self._rig.tables[Table.REFERENCE].row_zero() if own is None else own[0].tolist()
        return list(row)

    def _reference(self, index: int) -> list[float] | None:
        own = self._rig.options.reference
        if own is None:
            return self._rig.tables[Table.REFERENCE].row(index)
        values: list[float] = own[index].tolist()
        return values

    def next_wake_ns(self, now_ns: int, room: bool) -> int | None:
        clock = self._rig.clock
        if self._again is not None and room:
            return now_ns
        if self.state is RigState.RETURNING:
            return now_ns if clock.fast else clock.wall_ns(self._back_tick)
        if self.state is RigState.ARMED and self._start_tick is not None:
            return now_ns if clock.fast else clock.wall_ns(self._start_tick)
        if self.state is RigState.RUNNING and self._trial is not None:
            return self._next_sample_ns(self._trial, now_ns, room)
        return None

    def _next_sample_ns(self, trial: Trial, now_ns: int, room: bool) -> int | None:
        clock = self._rig.clock
        if clock.fast and not room:
            return None
        if clock.fast:
            return now_ns if self._starved_ns is None else now_ns + 1_000_000
        return clock.wall_ns(trial.start_tick + trial.count * self._rig.plant.period_ticks)
