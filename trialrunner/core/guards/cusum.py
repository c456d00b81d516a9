"""CUSUM: does the error norm stay a little above its level, trial after trial?"""

from dataclasses import dataclass
from typing import Any, ClassVar

from trialrunner.core.bounds import STRICT, NonNegative, Positive, PositiveCount
from trialrunner.core.charts import cusum_limit, cusum_step
from trialrunner.core.guards import Action
from trialrunner.core.guards.norm_charts import NormChart


@dataclass(frozen=True, kw_only=True)
class Cusum(NormChart):
    """Fires when small excesses of the error norm over its level add up (Page 1954, one-sided).

    Works on ln(norm) in units of the scatter measured over the last trials. It adds up growth only,
    so a falling error gives neither an alarm nor credit.
    """

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT
    NAME: ClassVar[str] = "cusum"
    CHARTS: ClassVar[int] = 1
    KEPT: ClassVar[str] = "sum"

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

    def add(self, before: float, score: float) -> float:
        return cusum_step(before, score, self.slack)

    def limit(self, run_length: float) -> float:
        return cusum_limit(self.slack, run_length)

    def words(self, total: float, limit: float) -> str:
        return f"their excess adds up to {total:.3g} standard deviations, the limit is {limit:.4g}"
