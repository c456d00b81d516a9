"""Guards: one file each behind one contract, listed in `guard_table`.

To add a guard: a settings dataclass with defaults and a pure `judge`, and a row in the table.
Guards of the stage ADMISSION decide whether a trial counts (they may say `void`); guards of the
stage LEARNING see only trials that count.
"""

from dataclasses import dataclass
from enum import StrEnum
from typing import Any, Protocol

import numpy as np

from trialrunner.core.trial import Array, GuardResult, Mask, Memory, Trial


class Stage(StrEnum):
    ADMISSION = "admission"
    LEARNING = "learning"


@dataclass(frozen=True)
class GuardContext:
    """What a guard may know of the run beside the trial."""

    period_s: float
    low: Array
    """(n_inputs,): box limits in force."""
    high: Array
    output_low: Array
    """(n_outputs,): range of each output channel."""
    output_high: Array
    start_state: Array
    """(n_outputs,): where a trial must start."""
    start_tolerance: Array
    """(n_outputs,)."""
    clipped: Mask
    """(n_samples, n_inputs): true where the daemon's limits cut the law's wish for this trial."""
    error_norm: float
    """Scaled error norm of this trial (see norms.error_norm); NaN if the trial is incomplete."""
    best_norm: float
    """Smallest so far among trials that counted; infinity at first."""
    best_trial: int
    """-1 at first."""
    recent_norms: tuple[float, ...]
    """Norms of the last trials that counted, oldest first, without this one."""
    learning: bool

    @property
    def limited_share(self) -> float:
        return float(np.mean(self.clipped)) if self.clipped.size else 0.0


class GuardSettings(Protocol):
    enabled: bool

    def judge(self, trial: Trial, context: GuardContext, memory: Memory) -> GuardResult:
        """A verdict on this trial and what to remember; pure."""


def guard_table() -> dict[str, tuple[Stage, type[Any]]]:
    """Stage and settings class of each guard by its name, in the order in which they judge."""
    from trialrunner.core.guards.divergence import Divergence
    from trialrunner.core.guards.error_growth import ErrorGrowth
    from trialrunner.core.guards.integrity import Integrity
    from trialrunner.core.guards.saturation import Saturation
    from trialrunner.core.guards.start import StartState, StartTiming

    return {
        "integrity": (Stage.ADMISSION, Integrity),
        "start_state": (Stage.ADMISSION, StartState),
        "start_timing": (Stage.ADMISSION, StartTiming),
        "divergence": (Stage.LEARNING, Divergence),
        "error_growth": (Stage.LEARNING, ErrorGrowth),
        "saturation": (Stage.LEARNING, Saturation),
    }
