"""Saturation: how much of the input is at a limit, and does it become ever more?"""

from dataclasses import dataclass
from statistics import fmean
from typing import Any, ClassVar

import numpy as np

from trialrunner.core.bounds import STRICT, Fraction, PositiveCount
from trialrunner.core.guards import Action, GuardContext, Report, rose
from trialrunner.core.trial import GuardResult, Memory, Purpose, Trial


@dataclass(frozen=True, kw_only=True)
class Saturation:
    """Fires when an input is at a limit for too large a share of the trial, or for ever more.

    A sample counts when the daemon cut the law's wish for it or the rig reported its actuator at
    a limit. While the soft start holds the limits down only the rig's reports count. A rising
    share alone is no fault: a feedforward that grows towards what the rig needs touches its limits
    more and more. It is one when the error no longer falls with it.
    """

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT
    NAME: ClassVar[str] = "saturation"

    enabled: bool = True
    share: Fraction = 0.5
    """Largest share of the samples of any one input; 1: off."""
    action: Action = "warn"
    rising_trials: PositiveCount = 5
    """Trials in a row, each with more limited samples than the one before, while the error norm
    did not fall over them."""
    rising_share: Fraction = 0.05
    """Smallest rise of the share over these trials that counts."""
    rising_action: Action = "freeze"

    def judge(self, trial: Trial, context: GuardContext, memory: Memory) -> GuardResult:
        shares, norms = _floats(memory, "shares"), _floats(memory, "norms")
        if trial.purpose is not Purpose.LEARN:
            return Report(self.NAME, memory).passed()
        by_input = _limited_share(trial, context)
        share = max(by_input)
        worst = by_input.index(share)
        kept = self.rising_trials + 1
        shares = [*shares, fmean(by_input)][-kept:]
        norms = [*norms, context.error_norm][-kept:]
        report = Report(self.NAME, {"shares": shares, "norms": norms})
        if self._keeps_rising(shares, norms):
            reason = (
                f"the share of limited samples rose {self.rising_trials} trials in a row, from "
                f"{shares[0]:.3g} to {shares[-1]:.3g} (limit of the rise {self.rising_share:.3g}), "
                f"while the error norm did not fall ({norms[0]:.4g} to {norms[-1]:.4g})"
            )
            rise = shares[-1] - shares[0]
            return report.fired(self.rising_action, reason, rise, self.rising_share)
        if share > self.share:
            reason = (
                f"input {context.inputs[worst].name} was at a limit for a share of {share:.3g} of "
                f"the trial; the limit is {self.share:.3g}"
            )
            return report.fired(self.action, reason, share, self.share)
        return report.passed()

    def _keeps_rising(self, shares: list[float], norms: list[float]) -> bool:
        rising = rose(shares, self.rising_trials) and shares[-1] - shares[0] >= self.rising_share
        return rising and norms[-1] >= norms[0]


def _limited_share(trial: Trial, context: GuardContext) -> list[float]:
    """Share of samples at a limit by input."""
    limited = trial.limited if context.limits_rising else trial.limited | context.clipped
    n_samples, n_inputs = limited.shape
    return [int(np.count_nonzero(limited[:, j])) / n_samples for j in range(n_inputs)]


def _floats(memory: Memory, key: str) -> list[float]:
    value = memory.get(key, [])
    return list(value) if isinstance(value, list) else []
