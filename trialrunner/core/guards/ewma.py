"""EWMA: has the error norm's moving mean left its level?"""

from dataclasses import dataclass
from typing import Any, ClassVar

from trialrunner.core.bounds import STRICT, MemoryWeight, NonNegative, Positive, PositiveCount
from trialrunner.core.charts import (
    ewma_sigma,
    ewma_step_up,
    ewma_up_limit,
    per_chart,
)
from trialrunner.core.guards import Action, GuardContext, Report
from trialrunner.core.guards.norm_charts import comparison, judged, level_before, number, score_of
from trialrunner.core.trial import GuardResult, Memory, Trial


@dataclass(frozen=True, kw_only=True)
class Ewma:
    """Fires when the weighted mean of the last trials' error norms lies too far above the level.

    The weighted mean (Roberts 1959) of ln(norm) in units of its scatter, held at zero from below,
    so that a falling error gives no credit. Slower than the CUSUM on a jump, surer on slow growth.
    """

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT
    NAME: ClassVar[str] = "ewma"
    CHARTS: ClassVar[int] = 1

    enabled: bool = True
    action: Action = "warn"
    weight: MemoryWeight = 0.1
    """Weight of the newest trial; smaller looks for smaller growth."""
    false_alarm_trials: Positive = 5000.0
    """Wished mean number of trials between false alarms of all charts of a run together."""
    warm_up_trials: PositiveCount = 12
    """Trials that must have counted before it judges."""
    least_spread: NonNegative = 0.05
    """Scatter of ln(norm) below which a measured scatter is not believed; 0.05 is about 5 %."""

    def judge(self, trial: Trial, context: GuardContext, memory: Memory) -> GuardResult:
        level = level_before(context, self.warm_up_trials, self.least_spread)
        if level is None or not judged(trial):
            return self._report(0.0, -1).passed()
        before, first = number(memory, "mean", 0.0), int(number(memory, "first", -1))
        mean = ewma_step_up(before, score_of(context, level), self.weight)
        first = trial.index if before == 0.0 else first
        width = ewma_up_limit(self.weight, per_chart(self.false_alarm_trials, context.n_charts))
        limit = width * ewma_sigma(self.weight)
        if mean <= limit:
            return self._report(mean, first).passed()
        reason = (
            f"{comparison(context, level, first, trial.index)}; their weighted mean lies "
            f"{mean:.3g} standard deviations above it, the limit is {limit:.4g}"
        )
        return self._report(0.0, -1).fired(self.action, reason, mean, limit)

    def _report(self, mean: float, first: int) -> Report:
        return Report(self.NAME, {"mean": mean, "first": first if mean > 0.0 else -1})
