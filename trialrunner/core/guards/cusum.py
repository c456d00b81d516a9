"""CUSUM: does the error norm stay a little above its level, trial after trial?"""

from dataclasses import dataclass
from typing import Any, ClassVar

from trialrunner.core.bounds import STRICT, NonNegative, Positive, PositiveCount
from trialrunner.core.charts import cusum_limit, cusum_step, per_chart
from trialrunner.core.guards import Action, GuardContext, Report
from trialrunner.core.guards.norm_charts import comparison, judged, level_before, number, score_of
from trialrunner.core.trial import GuardResult, Memory, Trial


@dataclass(frozen=True, kw_only=True)
class Cusum:
    """Fires when small excesses of the error norm over its level add up (Page 1954, one-sided).

    Works on ln(norm) in units of the scatter measured over the last trials. It adds up growth only,
    so a falling error gives neither an alarm nor credit.
    """

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT
    NAME: ClassVar[str] = "cusum"
    CHARTS: ClassVar[int] = 1

    enabled: bool = True
    action: Action = "freeze"
    slack: Positive = 0.5
    """Standard deviations of scatter that no excess below adds to; half the growth looked for."""
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
        before, first = number(memory, "sum", 0.0), int(number(memory, "first", -1))
        total = cusum_step(before, score_of(context, level), self.slack)
        first = trial.index if before == 0.0 else first
        limit = cusum_limit(self.slack, per_chart(self.false_alarm_trials, context.n_charts))
        if total <= limit:
            return self._report(total, first).passed()
        reason = (
            f"{comparison(context, level, first, trial.index)}; their excess adds up to "
            f"{total:.3g} standard deviations, the limit is {limit:.4g}"
        )
        return self._report(0.0, -1).fired(self.action, reason, total, limit)

    def _report(self, total: float, first: int) -> Report:
        return Report(self.NAME, {"sum": total, "first": first if total > 0.0 else -1})
