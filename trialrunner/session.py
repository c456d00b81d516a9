"""The loop of a run: one thread that performs what the cycle's table says and decides nothing.

The update and the commit of a trial run in a one-thread executor, so that a halt is answered at
any moment.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Executor
from typing import Any, ClassVar

from drivers.errors import LinkBusy
from drivers.link import Link
from drivers.messages import FaultCode, Refusal, RigState
from trialrunner import operator_desk as desk
from trialrunner.clock import Clock
from trialrunner.conversation import Conversation
from trialrunner.conversation import events as rig
from trialrunner.core.cycle import Action, Cycle, Event, State, step
from trialrunner.core.errors import CoreError
from trialrunner.core.run_state import Outcome, RunState
from trialrunner.flight import Flight
from trialrunner.observer import Observer
from trialrunner.operator_messages import OperatorAnswer, OperatorRequest
from trialrunner.record import RecordError
from trialrunner.rig_line import RigLine
from trialrunner.run_keeper import RunKeeper
from trialrunner.run_parts import Built, RunRefused, SessionSettings, same_rig
from trialrunner.sample_watch import SampleWatch
from trialrunner.timers import SECOND_NS, Timers
from trialrunner.update_job import PendingRequest

STOP_CATEGORY = 1
"""Controlled stop, then power removed: what the daemon asks for (words of IEC 60204-1)."""

BUSY_PATIENCE_S = 60.0
"""How long a rig may say that it is busy with another daemon, before ours gives up."""


class Session:
    """One run of the daemon. `turn` is one pass of the loop; `finished` says when it is over."""

    def __init__(
        self,
        settings: SessionSettings,
        clock: Clock,
        open_link: Callable[[], Link],
        new_session: Callable[[], int],
        build: Callable[[rig.Greeted], Built],
        executor: Executor,
        observer: Observer,
        wake: Callable[[], None] = lambda: None,
    ) -> None:
        self.settings = settings
        self.clock = clock
        self.observer = observer
        self.cycle = Cycle()
        self.finished = False
        self.exit_reason = ""
        """Empty after a normal end, else why the daemon left."""
        self.halted_by = ""
        """Why the run is halted, or was when the daemon left; empty otherwise."""
        self._build = build
        self._wish = ""
        """Why somebody asked for the pause or end that waits for the trial boundary."""
        self._busy_since_ns = 0
        self.keeper = RunKeeper(executor, clock, wake)
        self.jobs = self.keeper.jobs
        self._watch = SampleWatch(None)
        self.timers = Timers(clock)

        def converse(link: Link) -> Conversation:
            return Conversation(
                settings.timing, settings.name, new_session, link.max_body, link.block_bytes
            )

        self.line = RigLine(open_link, converse, clock, self.timers, self)
        self._flight = Flight(
            settings.for_starts(),
            self.line,
            clock,
            self.timers,
            on_missed=lambda text: self._event(Event.MISSED, text),
            on_still=self._halt,
        )
        self.timers.start("connect", 0.0, self.line.connect)

    @property
    def state(self) -> RunState:
        """Of the run, before the trial under way."""
        return self.keeper.state

    @property
    def built(self) -> Built | None:
        """None until the rig has greeted."""
        return self.keeper.built

    # -- the loop ---------------------------------------------------------------------------

    def turn(self) -> None:
        """One pass: everything that is due now, nothing that waits."""
        self.line.read()
        self._hear_rig()
        self._end_job()
        self.timers.run_due()
        self._hear_rig()
        self.line.write()

    def next_wake_ns(self) -> int:
        """When `turn` is wanted next, if nothing arrives before."""
        now_ns = self.clock.now_ns()
        wakes = [now_ns + SECOND_NS]
        timer_ns = self.timers.next_ns()
        if timer_ns is not None:
            wakes.append(timer_ns)
        if self.line.link is not None:
            wakes.append(self.line.talk.next_wake_ns())
        if self.jobs.has_work:
            wakes.append(now_ns)
        return min(wakes)

    def request_stop(self, cause: str) -> None:
        """SIGTERM or SIGINT: end at the trial boundary; at once after the grace or a second one."""
        if self.cycle.end_wanted or self.cycle.state is State.HALTED:
            self._event(Event.ABORT, cause)
            return
        self.timers.start(
            "grace",
            self.settings.stop_grace_s,
            lambda: self._event(Event.ABORT, f"{cause}, and the trial did not end in time"),
        )
        self._event(Event.END, cause)

    def abandon(self, why: str) -> None:
        """An error that the loop cannot mend: tell the rig to stop, or goodbye if it rests."""
        self.exit_reason = why
        if self.line.up:
            if self.cycle.state is State.IDLE:
                self.line.talk.close()
            else:
                self.line.talk.halt(STOP_CATEGORY, why)
            self.line.write()
        self._leave()

    # -- the line ---------------------------------------------------------------------------

    def link_is_up(self) -> bool:
        return self.line.up

    def line_lost(self, why: str) -> None:
        self._flight.collected(self.line.give_up_trial())
        if not self.finished:
            self._event(Event.LOST, why)

    def line_trouble(self, why: str) -> None:
        self.observer.event("link", why)

    def tell_link(self) -> None:
        """Refresh what the status says of the link."""
        talk, link = self.line.conversation, self.line.link
        errors = 0 if talk is None else talk.bad_frames
        if link is not None:
            errors += sum(link.statistics().errors.values())
        self.observer.link(self.line.up, errors)

    # -- what the rig says ------------------------------------------------------------------

    def _hear_rig(self) -> None:
        talk = self.line.conversation
        while talk is not None and talk.events and not self.finished:
            event = talk.events.popleft()
            self._REPORTS[type(event)](self, event)

    def _on_greeted(self, greeted: rig.Greeted) -> None:
        self.line.greeted()
        self._busy_since_ns = 0
        if self.built is not None and not same_rig(self.built.intake.greeted, greeted):
            self._halt("another rig, or the same with other channels, answers on the link")
            return
        if self.built is None:
            self.keeper.take_up(self._build(greeted))
            run = self.keeper.run
            self._watch = SampleWatch(run.advancer.envelope(run.intake.reference))
            n_samples = len(run.intake.reference)
            self.observer.built(greeted.greeting.name, n_samples, self.state)
        if self.state.over:
            self._event(Event.END, f"the record says that the run is over: {self.state.over}")
            return
        self._event(Event.GREETED, f"the rig {greeted.greeting.name} greets")
        if self.state.halted and self.cycle.state is not State.HALTED:
            self._halt(f"the record says: {self.state.halted}")

    def _on_rig_changed(self, event: rig.RigChanged) -> None:
        beat = self.line.talk.heartbeat
        if event.state is RigState.READY and beat is not None:
            self._flight.ready_tick = beat.tick
        self.observer.rig(event.state.name.lower())

    def _on_fault(self, event: rig.RigFaulted) -> None:
        if self.cycle.state is State.HALTED and event.code == FaultCode.HALTED:
            return
        self._event(Event.FAULT, f"the rig reports a fault: {event.text}")

    def _on_refused(self, event: rig.RigRefused) -> None:
        text = f"the rig refuses {event.order}: {event.text}"
        if event.order == "Hello" and event.code == Refusal.BUSY:
            self._busy(text)
            return
        if self.built is None:
            raise RunRefused(text)
        if event.order == "Start" and event.code == Refusal.TOO_LATE:
            self._flight.too_late(text)
        elif event.order in ("Hello", "greeting"):
            self.line.lose(text)
        else:
            self._halt(text)

    def _busy(self, text: str) -> None:
        """Another session is alive: perhaps that of a daemon that died, until the rig's watchdog
        gives it up. Raises LinkBusy when it lasts."""
        now_ns = self.clock.now_ns()
        self._busy_since_ns = self._busy_since_ns or now_ns
        if now_ns - self._busy_since_ns > BUSY_PATIENCE_S * SECOND_NS:
            raise LinkBusy(f"{text}; stop the other daemon, or wait until it has gone")
        self.line.lose(text)

    def _on_armed(self, _: rig.TrialArmed) -> None:
        self._event(Event.ARMED, "tables verified, rig at its start, clocks exchanged")

    def _on_disarmed(self, _: rig.TrialDisarmed) -> None:
        self._flight.in_flight = False
        self._event(Event.DISARMED, "disarmed")

    def _on_started(self, event: rig.TrialStarted) -> None:
        self._flight.started()
        self._event(Event.STARTED, f"started at rig tick {event.tick}")
        self.keeper.tidy()

    def _on_samples(self, event: rig.SamplesArrived) -> None:
        self.observer.samples(event.first + event.count)
        breach = self._watch.breach(event, self.state.purpose)
        if breach and self.cycle.state is not State.HALTED:
            self._halt(breach)

    def _on_finished(self, _: rig.TrialFinished) -> None:
        self._flight.finished()
        self._event(Event.FINISHED, "the rig reports the end of the trial")

    def _on_collected(self, event: rig.Collected) -> None:
        self._flight.collected(event)
        self._event(Event.COLLECTED, f"{event.reason.name.lower()}, {event.count} samples")

    def _on_cleared(self, _: rig.RigCleared) -> None:
        self.observer.event("rig", "the rig left its safe state")

    def _on_silent(self, event: rig.RigSilent) -> None:
        self.line.lose(event.text)

    def _on_closed(self, _: rig.SessionClosed) -> None:
        self._leave()

    _REPORTS: ClassVar[dict[type[rig.RigEvent], Callable[[Session, Any], None]]] = {
        rig.Greeted: _on_greeted,
        rig.RigChanged: _on_rig_changed,
        rig.RigFaulted: _on_fault,
        rig.RigRefused: _on_refused,
        rig.RigCleared: _on_cleared,
        rig.RigSilent: _on_silent,
        rig.TrialArmed: _on_armed,
        rig.TrialDisarmed: _on_disarmed,
        rig.TrialStarted: _on_started,
        rig.SamplesArrived: _on_samples,
        rig.TrialFinished: _on_finished,
        rig.Collected: _on_collected,
        rig.SessionClosed: _on_closed,
    }

    # -- the cycle's actions ----------------------------------------------------------------

    def _event(self, event: Event, cause: str) -> None:
        before = self.cycle
        if event in (Event.PAUSE, Event.END):
            self._wish = cause
        self.cycle, actions = step(before, event)
        if self.cycle.state is State.PAUSED is not before.state:
            cause = self._wish
        if self.cycle.state is not before.state:
            self._note_halt(before.state, cause)
        if self.cycle != before or actions:
            self._note_transition(before.state, event, cause)
        for action in actions:
            self._ACTIONS[action](self, cause)

    def _note_halt(self, before: State, cause: str) -> None:
        if self.cycle.state is State.HALTED:
            self.halted_by = cause
        elif before is State.HALTED and self.cycle.state is not State.IDLE:
            self.halted_by = ""

    def _note_transition(self, before: State, event: Event, cause: str) -> None:
        self.observer.transition(before, event, self.cycle.state, cause)
        if self.built is not None:
            self.built.writer.log_transition(
                utc=self.clock.utc(),
                trial=self.state.trial,
                before=before.value,
                event=event.value,
                after=self.cycle.state.value,
                cause=cause,
            )

    def _halt(self, why: str) -> None:
        self._event(Event.HALT, why)

    def _do_load(self, cause: str) -> None:
        if self.keeper.late:
            # Its commit is waited for before the next trial is judged.
            self._load()
        else:
            self.jobs.when_free(self._load)

    def _load(self) -> None:
        if self.keeper.has_requests:
            self.keeper.apply_requests(self._load)
        elif self.cycle.state is State.LOADING and self.line.up:
            self.observer.loading(self.state)
            self._flight.load(self.keeper.run.intake, self.state.trial, self.keeper.carry)

    def _do_order_start(self, cause: str) -> None:
        self._flight.order_start()

    def _do_disarm(self, cause: str) -> None:
        self.timers.cancel("start")
        self.line.talk.disarm()

    def _do_process(self, cause: str) -> None:
        self.jobs.when_free(self._process)

    def _do_process_void(self, cause: str) -> None:
        self._flight.collected(self.line.give_up_trial())
        self.jobs.when_free(self._process)

    def _process(self) -> None:
        if not self._flight.in_flight or self.built is None:
            if self.cycle.state is State.UPDATING:
                # No trial was loaded, so there is none to record: go on as after an update.
                self._event(Event.ADVANCED, "no trial was under way")
            return
        intake = self.built.intake
        trial, timing = self._flight.land(intake, self.state, self.keeper.carry)
        trial = self._watch.landed(trial)
        self.timers.start("deadline", self.settings.update_deadline_s, self._deadline)
        self.keeper.update(trial, timing, self._on_outcome)
        self.observer.trace(trial, intake.period_s)

    def _deadline(self) -> None:
        if self.cycle.state is State.UPDATING and self.keeper.go_on_without_update():
            self._event(Event.LATE, f"no update within {self.settings.update_deadline_s:g} s")

    def _on_outcome(self, outcome: Outcome) -> None:
        self.timers.cancel("deadline")
        self.observer.outcome(outcome)
        self._watch.judged(outcome)
        if outcome.late:
            return
        if outcome.action == "halt":
            self._halt(outcome.sentence)
        elif self.cycle.state is State.UPDATING:
            over = outcome.state.over
            self._event(Event.OVER if over else Event.ADVANCED, over or outcome.sentence)

    def _do_halt_rig(self, cause: str) -> None:
        self._flight.over()
        self.timers.cancel("deadline")
        if self.line.up:
            self.line.talk.halt(STOP_CATEGORY, cause)
        self.observer.event("halt", cause)
        if self.settings.exit_on_halt and self.cycle.state is State.HALTED:
            self.exit_reason = f"halted: {cause}"
            self._exit_soon()

    def _exit_soon(self) -> None:
        """Leave once the rig had time to say that it is safe."""
        delay_s = 2 * self.settings.timing.answer_timeout_s
        self.timers.start("exit", delay_s, lambda: self._event(Event.ABORT, self.exit_reason))

    def _do_clear_rig(self, cause: str) -> None:
        self.line.talk.clear(cause)

    def _do_reconnect(self, cause: str) -> None:
        self._flight.over()
        self.observer.event("link", f"link lost: {cause}")
        self.line.reconnect_later()

    def _do_finish(self, cause: str) -> None:
        self.jobs.when_free(self._finish)

    def _finish(self) -> None:
        self.timers.cancel("grace")
        if not self.line.up:
            self._leave()
            return
        self.line.talk.close()
        self.timers.start("bye", 2 * self.settings.timing.answer_timeout_s, self._leave)

    def _leave(self) -> None:
        self.finished = True
        self.timers.clear()

    _ACTIONS: ClassVar[dict[Action, Callable[[Session, str], None]]] = {
        Action.LOAD: _do_load,
        Action.ORDER_START: _do_order_start,
        Action.DISARM: _do_disarm,
        Action.PROCESS: _do_process,
        Action.PROCESS_VOID: _do_process_void,
        Action.HALT_RIG: _do_halt_rig,
        Action.CLEAR_RIG: _do_clear_rig,
        Action.RECONNECT: _do_reconnect,
        Action.FINISH: _do_finish,
    }

    # -- operator ---------------------------------------------------------------------------

    def carry_out(
        self, request: OperatorRequest, ruling: desk.Ruling, reply: OperatorAnswer
    ) -> None:
        """Set going what an operator's request was ruled to mean, and put it on record."""
        row = desk.row(request, ruling, reply)
        why = f"{request.who}: {request.why}"
        if ruling.request is None or not ruling.ok:
            self.jobs.when_free(lambda: self.keeper.put_on_record(row))
            if ruling.event is not None:
                self._event(ruling.event, why)
            return
        at_rest = self.cycle.state in desk.AT_REST
        at_boundary = at_rest or ruling.request.kind == "rollback"
        self.keeper.accept(PendingRequest(ruling.request, row), at_boundary)
        if ruling.event is not None:
            self._event(ruling.event, why)
        elif at_rest:
            self.jobs.when_free(lambda: self.keeper.apply_requests(_nothing))

    def _end_job(self) -> None:
        try:
            self.jobs.poll()
        except (RecordError, CoreError) as error:
            self.keeper.forget_job()
            self.timers.cancel("deadline")
            self.exit_reason = str(error)
            self._halt(f"the trial could not be judged or stored: {error}")
            self._exit_soon()


def _nothing() -> None:
    """Requests applied at rest have no trial to load after them."""
