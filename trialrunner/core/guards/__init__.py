"""Guards: one file each behind one contract, listed in `guard_table`.

To add a guard: a settings dataclass with defaults and a pure `judge`, and a row in the table.
Guards of the stage ADMISSION decide whether a trial counts (they may say `void`); guards of the
stage LEARNING see only trials that count. What follows a verdict is the ladder's affair.
"""

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from enum import StrEnum
from itertools import pairwise
from typing import Any, Literal, Protocol, runtime_checkable

from trialrunner.core.errors import SettingError
from trialrunner.core.settings import InputChannel, OutputChannel
from trialrunner.core.trial import GuardResult, Level, Mask, Memory, Trial, Verdict

Action = Literal["warn", "freeze", "roll back", "halt"]
"""What a guard asks for when it fires; the words of the verdict ladder."""


class Stage(StrEnum):
    ADMISSION = "admission"
    LEARNING = "learning"


@dataclass(frozen=True, kw_only=True)
class GuardContext:
    """What a guard may know of the run beside the trial; the state before the trial."""

    period_s: float
    inputs: tuple[InputChannel, ...]
    outputs: tuple[OutputChannel, ...]
    clipped: Mask
    """(n_samples, n_inputs): true where the daemon's limits cut the law's wish for this trial."""
    error_norm: float
    """Scaled error norm of this trial (see norms.error_norm); not finite if it is incomplete."""
    first_norm: float
    """That of the first trial that counted; NaN at first."""
    best_norm: float
    """Smallest so far among trials that counted; infinity at first."""
    best_trial: int
    """-1 at first."""
    recent_norms: tuple[float, ...]
    """Norms of the last trials that counted, oldest first, without this one, and none from before
    an operator last rolled back or resumed: from there on the run is judged anew."""
    learning: bool
    limits_rising: bool
    """The soft start still holds the feedforward below its full limits."""
    n_charts: int = 1
    """Control charts among the guards of the run; together they share the wished false alarms."""
    auxiliary: tuple[str, ...] = ()
    """Names of the trial's auxiliary channels; empty where nobody told."""


class GuardSettings(Protocol):
    enabled: bool

    def judge(self, trial: Trial, context: GuardContext, memory: Memory) -> GuardResult:
        """A verdict on this trial and what to remember; pure."""


@runtime_checkable
class ChecksChannels(Protocol):
    """A guard whose settings name channels."""

    def check_channels(self, outputs: tuple[OutputChannel, ...]) -> None:
        """Raises SettingError if the settings do not fit the channels."""


@dataclass(frozen=True)
class Report:
    """Short-hand for a guard's answers."""

    guard: str
    memory: Memory = field(default_factory=dict)

    def passed(self) -> GuardResult:
        return GuardResult(Verdict(self.guard, Level.PASS), self.memory)

    def fired(self, action: Action, reason: str, value: float, limit: float) -> GuardResult:
        verdict = Verdict(self.guard, level_of(action), reason, _number(value), float(limit))
        return GuardResult(verdict, self.memory)

    def void(self, reason: str, value: float, limit: float) -> GuardResult:
        """Level WARN: what follows a void trial is the ladder's affair."""
        verdict = Verdict(self.guard, Level.WARN, reason, _number(value), float(limit), void=True)
        return GuardResult(verdict, self.memory)


def _number(value: float) -> float:
    """A measurement that is no number is beyond any limit; the record keeps no NaN."""
    return math.inf if math.isnan(value) else float(value)


def level_of(action: Action) -> Level:
    """The rung of a word."""
    return Level[action.upper().replace(" ", "_")]


def rose(values: Sequence[float], times: int) -> bool:
    """Each of the last `times` values is larger than the one before it."""
    run = values[-1 - times :]
    return len(run) > times and all(later > earlier for earlier, later in pairwise(run))


def require_channels(name: str, used: Iterable[str], outputs: tuple[OutputChannel, ...]) -> None:
    """Raise SettingError if a setting names an output that the run does not have."""
    known = [channel.name for channel in outputs]
    for channel in used:
        if channel not in known:
            raise SettingError(
                f"{name}: expected names of output channels ({', '.join(known)}), found {channel}"
            )


def guard_table() -> dict[str, tuple[Stage, type[Any]]]:
    """Stage and settings class of each guard by its name, in the order in which they judge."""
    from trialrunner.core.guards.bands import Bands
    from trialrunner.core.guards.cusum import Cusum
    from trialrunner.core.guards.divergence import Divergence
    from trialrunner.core.guards.envelope import Envelope
    from trialrunner.core.guards.error_growth import ErrorGrowth
    from trialrunner.core.guards.ewma import Ewma
    from trialrunner.core.guards.health import Health
    from trialrunner.core.guards.integrity import Integrity
    from trialrunner.core.guards.saturation import Saturation
    from trialrunner.core.guards.start import StartState, StartTiming

    return {
        "integrity": (Stage.ADMISSION, Integrity),
        "start_state": (Stage.ADMISSION, StartState),
        "start_timing": (Stage.ADMISSION, StartTiming),
        "envelope": (Stage.ADMISSION, Envelope),
        "divergence": (Stage.LEARNING, Divergence),
        "error_growth": (Stage.LEARNING, ErrorGrowth),
        "cusum": (Stage.LEARNING, Cusum),
        "ewma": (Stage.LEARNING, Ewma),
        "bands": (Stage.LEARNING, Bands),
        "saturation": (Stage.LEARNING, Saturation),
        "health": (Stage.LEARNING, Health),
    }
