"""What happens to a trial off the loop: judge, learn, commit; in a one-thread executor.

The executor's thread is the only one that touches the record's connection. The loop and the job
race for the deadline through one claim, so that a late update is either used whole or not at all.
"""

import json
import threading
from dataclasses import dataclass, field, replace

from trialrunner.clock import Clock
from trialrunner.core.advance import Advancer, Judged
from trialrunner.core.errors import CoreError
from trialrunner.core.run_state import Carry, Outcome, Request, RunState
from trialrunner.core.trial import Trial
from trialrunner.record import RecordWriter, RequestRow, TrialTiming


@dataclass(frozen=True)
class PendingRequest:
    """An accepted operator request that changes the run state, waiting for its boundary."""

    request: Request
    row: RequestRow


@dataclass
class UpdateJob:
    """One trial on its way into the record."""

    advancer: Advancer
    writer: RecordWriter
    clock: Clock
    trial: Trial
    state: RunState
    carry: Carry
    timing: TrialTiming
    requests: tuple[PendingRequest, ...]
    """Freeze and learn requests made before the end of this trial; they hold for its update."""
    judged: Judged | None = None
    """Set before the law begins; read by the loop at the deadline."""
    late: bool = False
    _claim: threading.Lock = field(default_factory=threading.Lock)
    _ready: bool = False

    def claim_late(self) -> bool:
        """The loop says that the deadline is over; false if the update is ready after all."""
        with self._claim:
            self.late = not self._ready
            return self.late

    def run(self) -> Outcome:
        """Raises RecordError and CoreError; the loop halts on them."""
        started_ns = self.clock.now_ns()
        state, carry = apply_requests(
            self.advancer, self.writer, self.requests, self.state, self.carry
        )
        judged = self.advancer.judge(self.trial, state, carry)
        self.judged = judged
        outcome = self.advancer.advance_judged(judged, self.writer.recall)
        with self._claim:
            self._ready = True
        if self.late:
            outcome = self.advancer.advance_judged(judged, self.writer.recall, late=True)
        compute_s = (self.clock.now_ns() - started_ns) / 1e9
        self.writer.commit_trial(self.trial, outcome, self.timing.with_compute(compute_s))
        return outcome


def apply_requests(
    advancer: Advancer,
    writer: RecordWriter,
    requests: tuple[PendingRequest, ...],
    state: RunState,
    carry: Carry,
) -> tuple[RunState, Carry]:
    """Apply and commit operator requests, each in its own transaction.

    One that has become impossible since it was accepted changes nothing, and the record says so.
    """
    for pending in requests:
        try:
            state, carry, _ = advancer.apply_request(pending.request, state, carry, writer.recall)
        except CoreError as error:
            said = json.loads(pending.row.answer) | {"ok": False, "text": f"not done: {error}"}
            row = replace(pending.row, ok=False, changes_state=False, answer=json.dumps(said))
            writer.commit_request(row, state, None)
            continue
        writer.commit_request(pending.row, state, carry)
    return state, carry
