"""Watches the samples of the running trial; the limits themselves are the core's (envelope)."""

from __future__ import annotations

from dataclasses import replace

from trialrunner.conversation.events import SamplesArrived
from trialrunner.core.envelope import Envelope
from trialrunner.core.run_state import Outcome
from trialrunner.core.trial import Purpose, Trial


class SampleWatch:
    """One run's envelope and the last accepted trial around which its tube lies."""

    def __init__(self, envelope: Envelope | None) -> None:
        self._envelope = envelope
        self._landed: Trial | None = None
        self._breached = False

    def breach(self, event: SamplesArrived, purpose: Purpose) -> str:
        """Why the rig has to stop at once; empty if it need not."""
        envelope = self._envelope
        if envelope is None:
            return ""
        if purpose is Purpose.PROBE:
            # An experiment of the law's own moves the rig elsewhere on purpose.
            envelope = replace(envelope, accepted=None)
        outputs = event.rows[:, : len(envelope.outputs)]
        found = envelope.breach(outputs, event.first_row)
        if found is None:
            return ""
        self._breached = True
        return f"envelope: {found.reason}"

    def landed(self, trial: Trial) -> Trial:
        """The trial that the next outcome is about; void after a breach, however much arrived."""
        if self._breached:
            trial = replace(trial, finish="halted")
        self._landed, self._breached = trial, False
        return trial

    def judged(self, outcome: Outcome) -> None:
        """Lay the tube around a trial that counted; after a roll back there is none to lie around,
        because the next trial plays another feedforward."""
        trial, self._landed = self._landed, None
        if self._envelope is None or trial is None or outcome.void:
            return
        if outcome.action == "recall":
            self._envelope = replace(self._envelope, accepted=None)
        elif trial.purpose is not Purpose.PROBE:
            self._envelope = replace(self._envelope, accepted=trial.output)
