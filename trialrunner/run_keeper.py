"""The run's state in the loop's hands, and the jobs that change it: updates and requests.

Everything that takes the record's thread starts here, one job at a time.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Executor
from dataclasses import replace

from trialrunner.clock import Clock
from trialrunner.core.run_state import Carry, Outcome, RunState
from trialrunner.core.trial import Trial
from trialrunner.job_queue import JobQueue
from trialrunner.record import RequestRow, TrialTiming
from trialrunner.run_parts import Built
from trialrunner.update_job import PendingRequest, UpdateJob, apply_requests


class RunKeeper:
    """Where the run stands between two trials; empty until `take_up`."""

    def __init__(self, executor: Executor, clock: Clock, wake: Callable[[], None]) -> None:
        self.jobs = JobQueue(executor, wake)
        self.built: Built | None = None
        self.state = RunState()
        self._carry: Carry | None = None
        self._clock = clock
        self._job: UpdateJob | None = None
        self._before: list[PendingRequest] = []
        """Accepted requests that hold for the update of the trial under way."""
        self._after: list[PendingRequest] = []
        """Accepted requests for the boundary after it."""

    def take_up(self, built: Built) -> None:
        self.built = built
        self.state, self._carry = built.state, built.carry

    @property
    def run(self) -> Built:
        """What was built; only to be asked for after the greeting."""
        assert self.built is not None
        return self.built

    @property
    def carry(self) -> Carry:
        assert self._carry is not None
        return self._carry

    # -- updates ----------------------------------------------------------------------------

    @property
    def late(self) -> bool:
        """An update is under way that will not be used: its trial is settled but for the commit."""
        return self._job is not None and self._job.late

    def update(self, trial: Trial, timing: TrialTiming, done: Callable[[Outcome], None]) -> None:
        """Judge, learn and commit a trial; `done` is called with the new state in place."""
        requests, self._before = tuple(self._before), []
        built = self.run
        job = UpdateJob(
            built.advancer,
            built.writer,
            self._clock,
            trial,
            self.state,
            self.carry,
            timing,
            requests,
        )

        def finish(outcome: Outcome) -> None:
            self._job = None
            self.state, self._carry = outcome.state, outcome.carry
            done(outcome)

        self._job = job
        self.jobs.submit(job.run, finish)

    def go_on_without_update(self) -> bool:
        """The deadline is over: if the trial counts and its update is not ready, what was played
        is played again. False if the update has to be waited for."""
        job = self._job
        judged = None if job is None else job.judged
        if job is None or judged is None or judged.action != "learn" or not job.claim_late():
            return False
        self.state = judged.late_state
        self._carry = replace(self.carry, feedforward=job.trial.feedforward)
        return True

    def forget_job(self) -> None:
        """It failed."""
        self._job = None

    # -- requests ---------------------------------------------------------------------------

    @property
    def has_requests(self) -> bool:
        """Some wait for the trial boundary."""
        return bool(self._after)

    def accept(self, pending: PendingRequest, at_boundary: bool) -> None:
        (self._after if at_boundary else self._before).append(pending)

    def apply_requests(self, then: Callable[[], None]) -> None:
        """Apply and commit what waits for the boundary."""
        built, state, carry = self.run, self.state, self.carry
        requests, self._after = tuple(self._after), []

        def finish(changed: tuple[RunState, Carry]) -> None:
            self.state, self._carry = changed
            then()

        self.jobs.submit(
            lambda: apply_requests(built.advancer, built.writer, requests, state, carry), finish
        )

    def put_on_record(self, row: RequestRow) -> None:
        """A request that changes nothing in the run state."""
        built, state = self.built, self.state
        if built is not None:
            self.jobs.submit(lambda: built.writer.commit_request(row, state, None))

    def tidy(self) -> None:
        """Use the time of a trial for what would make a commit slow."""
        if self.built is not None and not self.jobs.busy:
            self.jobs.submit(self.built.writer.checkpoint)
