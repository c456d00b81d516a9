"""Divergence: hard limits on the error, whatever the history; the backstop of the other guards."""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, ClassVar

import numpy as np

from trialrunner.core.bounds import STRICT, AboveOne, Positive
from trialrunner.core.guards import Action, GuardContext, Report, require_channels
from trialrunner.core.settings import OutputChannel
from trialrunner.core.trial import GuardResult, Memory, Purpose, Trial


@dataclass(frozen=True, kw_only=True)
class Divergence:
    """Fires when the error is larger than any trial may make it."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT
    NAME: ClassVar[str] = "divergence"

    enabled: bool = True
    action: Action = "halt"
    norm_limit: Positive = math.inf
    """Largest scaled error norm."""
    peak_limits: Mapping[str, Positive] = field(default_factory=dict)
    """Largest absolute error at any sample by output channel, in the output's unit."""
    ratio_to_first: AboveOne = 5.0
    """Largest error norm as a multiple of the first trial's; infinity: off."""

    def check_channels(self, outputs: tuple[OutputChannel, ...]) -> None:
        require_channels("guards.divergence.peak_limits", self.peak_limits, outputs)

    def judge(self, trial: Trial, context: GuardContext, memory: Memory) -> GuardResult:
        report = Report(self.NAME, memory)
        for j, channel in enumerate(context.outputs):
            limit = self.peak_limits.get(channel.name, math.inf)
            peak = float(np.max(np.abs(trial.error[:, j]))) if limit < math.inf else 0.0
            if peak > limit:
                unit = channel.unit
                reason = (
                    f"output {channel.name} has a peak error of {peak:.4g} {unit}; the limit is "
                    f"{limit:.4g} {unit}"
                )
                return report.fired(self.action, reason, peak, limit)
        norm = context.error_norm
        if norm > self.norm_limit:
            reason = f"the error norm is {norm:.4g}; the limit is {self.norm_limit:.4g}"
            return report.fired(self.action, reason, norm, self.norm_limit)
        return self._against_first(trial, context, report)

    def _against_first(self, trial: Trial, context: GuardContext, report: Report) -> GuardResult:
        """A probe of the law's own may well move the rig more than the first trial did."""
        limit = self.ratio_to_first * context.first_norm
        if trial.purpose is Purpose.PROBE or not context.first_norm > 0.0:
            return report.passed()
        if not context.error_norm > limit:
            return report.passed()
        reason = (
            f"the error norm is {context.error_norm:.4g}; the limit is {limit:.4g}, "
            f"{self.ratio_to_first:.4g} times that of the first trial"
        )
        return report.fired(self.action, reason, context.error_norm, limit)
