"""What a session is made of: its settings, and what is built once the rig has greeted."""

from __future__ import annotations

from dataclasses import dataclass, replace

from drivers.messages import StartMode
from trialrunner.conversation import LinkTiming
from trialrunner.conversation.events import Greeted
from trialrunner.core.advance import Advancer
from trialrunner.core.run_state import Carry, RunState
from trialrunner.flight import StartSettings
from trialrunner.record import RecordWriter
from trialrunner.trial_intake import Intake


class RunRefused(Exception):
    """The run cannot start or go on with this rig; the text says why and what to do."""


@dataclass(frozen=True)
class Built:
    """What exists once the rig has greeted and agrees with the configuration."""

    advancer: Advancer
    writer: RecordWriter
    intake: Intake
    state: RunState
    carry: Carry


@dataclass(frozen=True)
class SessionSettings:
    name: str
    timing: LinkTiming
    start: StartMode
    dwell_s: float
    update_deadline_s: float
    stop_grace_s: float
    exit_on_halt: bool

    def for_starts(self) -> StartSettings:
        timing = self.timing
        return StartSettings(self.start, self.dwell_s, timing.start_lead_s, timing.silence_s)


def same_rig(old: Greeted, new: Greeted) -> bool:
    """The same rig, whatever the numbers of the messages that described it."""

    def described(greeted: Greeted) -> object:
        channels = (*greeted.inputs, *greeted.outputs, *greeted.auxiliary)
        return (replace(greeted.greeting, number=0), [replace(c, number=0) for c in channels])

    return described(old) == described(new)
