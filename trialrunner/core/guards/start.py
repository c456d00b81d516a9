"""Start guards: did the trial start where and when it should?"""

import math
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from trialrunner.core.bounds import STRICT, Positive
from trialrunner.core.guards import GuardContext, Report
from trialrunner.core.trial import GuardResult, Memory, Trial


@dataclass(frozen=True, kw_only=True)
class StartState:
    """Voids a trial that started too far from the start of the reference.

    The tolerance is each output channel's own (`start_tolerance`).
    """

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT
    NAME: ClassVar[str] = "start_state"

    enabled: bool = True

    def judge(self, trial: Trial, context: GuardContext, memory: Memory) -> GuardResult:
        report = Report(self.NAME, memory)
        away = np.abs(trial.start_state - trial.reference[0])
        for channel, distance in zip(context.outputs, away.tolist(), strict=True):
            # Written so that a NaN is outside.
            if not distance <= channel.start_tolerance:
                unit = channel.unit
                return report.void(
                    f"output {channel.name} started {distance:.4g} {unit} from the reference; "
                    f"the limit is {channel.start_tolerance:.4g} {unit}",
                    distance,
                    channel.start_tolerance,
                )
        return report.passed()


@dataclass(frozen=True, kw_only=True)
class StartTiming:
    """Voids a trial that the rig started too early or too late; the tighter limit holds."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT
    NAME: ClassVar[str] = "start_timing"

    enabled: bool = True
    limit_s: Positive = math.inf
    """Largest distance of the actual from the ordered start."""
    limit_periods: Positive = 1.5
    """The same in sample periods. A rig that starts at its next sample is up to one late."""

    def judge(self, trial: Trial, context: GuardContext, memory: Memory) -> GuardResult:
        report = Report(self.NAME, memory)
        limit_s = min(self.limit_s, self.limit_periods * context.period_s)
        away_s = abs(trial.start_lateness_s)
        if away_s <= limit_s:
            return report.passed()
        word = "early" if trial.start_lateness_s < 0 else "late"
        reason = f"the trial started {away_s:.4g} s {word}; the limit is {limit_s:.4g} s"
        return report.void(reason, away_s, limit_s)
