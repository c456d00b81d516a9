"""One trial from its loading to its update: what the daemon ordered and what came back."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from drivers.messages import RigState, StartMode
from trialrunner.clock import Clock
from trialrunner.conversation.events import Collected
from trialrunner.core.run_state import Carry, RunState
from trialrunner.core.trial import Trial
from trialrunner.record import TrialTiming
from trialrunner.rig_line import RigLine
from trialrunner.timers import SECOND_NS, Timers
from trialrunner.trial_intake import Intake

MAX_START_TRIES = 4
"""Orders to start that came too late for the rig, each with twice the lead, before a void."""

UNCERTAINTIES = 8
"""Lead of a start as a multiple of the clock's uncertainty, so that a slow line still makes it."""

STILL_PERIODS = 5
"""Sample periods without a new sample after which a slow rig counts as standing still."""


@dataclass(frozen=True)
class StartSettings:
    start: StartMode
    dwell_s: float
    lead_s: float
    silence_s: float


class Flight:
    """The trial under way; `on_missed` and `on_still` tell the session what did not happen."""

    def __init__(
        self,
        settings: StartSettings,
        line: RigLine,
        clock: Clock,
        timers: Timers,
        on_missed: Callable[[str], None],
        on_still: Callable[[str], None],
    ) -> None:
        self._settings = settings
        self._line = line
        self._clock = clock
        self._timers = timers
        self._on_missed = on_missed
        self._on_still = on_still
        self.ready_tick = 0
        """Rig tick at which it last reported that it is back at its start."""
        self.in_flight = False
        """A trial was loaded and is not yet handed to the update job."""
        self._reset()

    def _reset(self) -> None:
        self._sent_crc = 0
        self._ordered_tick: int | None = None
        self._start_tries = 0
        self._seen = (-1, -1)
        self._started_utc = ""
        self._finished_ns: int | None = None
        self._collected: Collected | None = None

    def load(self, intake: Intake, trial: int, carry: Carry) -> None:
        """Send the tables and prepare the rig for the trial."""
        self._reset()
        tables = intake.tables(carry.feedforward)
        self._sent_crc = tables[0].crc
        self.in_flight = True
        self._line.talk.prepare(trial, tables, self._settings.start)

    def order_start(self) -> None:
        """Order the armed trial to start at a rig tick: host jitter cannot move it."""
        if self._settings.start is StartMode.RIG:
            return
        talk = self._line.talk
        assert talk.greeted is not None
        hz = talk.greeted.greeting.tick_hz
        lead_s = max(self._settings.lead_s, UNCERTAINTIES * talk.clock.uncertainty_s)
        lead_s *= 2**self._start_tries
        soonest = talk.clock.tick_at(self._clock.now_ns() + int(lead_s * SECOND_NS))
        self._ordered_tick = max(soonest, self.ready_tick + round(self._settings.dwell_s * hz))
        talk.start_at(self._ordered_tick)
        wait_s = (self._ordered_tick - soonest) / hz + lead_s + self._settings.silence_s
        text = f"the rig did not start at tick {self._ordered_tick}"
        self._timers.start("start", wait_s, lambda: self._on_missed(text))

    def too_late(self, text: str) -> None:
        """The rig refused a start in its past: order it again with twice the lead."""
        self._start_tries += 1
        if self._start_tries < MAX_START_TRIES:
            self.order_start()
        else:
            self._on_missed(text)

    def started(self) -> None:
        self._timers.cancel("start")
        self._started_utc = self._clock.utc()
        self._watch()

    def _watch(self) -> None:
        """A running rig whose sample count stands still has stopped."""
        talk = self._line.talk
        beat = talk.heartbeat
        if beat is not None and beat.state == RigState.RUNNING and beat.tick != self._seen[1]:
            # Judged only on a new heartbeat: a rig that says nothing at all is silent, not still.
            if beat.count == self._seen[0]:
                self._on_still(f"the rig runs but took no sample after sample {beat.count}")
                return
            self._seen = (beat.count, beat.tick)
        period_s = 0.0
        if talk.greeted is not None:
            period_s = talk.greeted.greeting.period_ticks / talk.greeted.greeting.tick_hz
        patience_s = max(self._settings.silence_s, STILL_PERIODS * period_s)
        self._timers.start("still", patience_s, self._watch)

    def finished(self) -> None:
        self._timers.cancel("start", "still")
        self._finished_ns = self._clock.now_ns()

    def collected(self, result: Collected | None) -> None:
        """Keep what arrived; nothing (None) does not replace what is here."""
        self._collected = result or self._collected

    def over(self) -> None:
        """The trial will not go on: halted, lost or disarmed."""
        self._timers.cancel("start", "still")

    def land(self, intake: Intake, state: RunState, carry: Carry) -> tuple[Trial, TrialTiming]:
        """The trial as measured, for the update job; the flight is over."""
        self.over()
        self.in_flight = False
        trial = intake.trial(state, carry, self._collected, self._sent_crc, self._ordered_tick)
        now_ns = self._clock.now_ns()
        began_ns = now_ns if self._finished_ns is None else self._finished_ns
        timing = TrialTiming(
            started_utc=self._started_utc or self._clock.utc(),
            monotonic_ns=now_ns,
            collect_s=(now_ns - began_ns) / SECOND_NS,
        )
        return trial, timing
