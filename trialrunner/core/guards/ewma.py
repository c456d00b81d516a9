"""EWMA: has the error norm's moving mean left its level?"""

from dataclasses import dataclass
from typing import Any, ClassVar

from trialrunner.core.bounds import STRICT, MemoryWeight, NonNegative, Positive, PositiveCount
from trialrunner.core.charts import ewma_sigma, ewma_step_up, ewma_up_limit
from trialrunner.core.guards import Action
from trialrunner.core.guards.norm_charts import NormChart


@dataclass(frozen=True, kw_only=True)
class Ewma(NormChart):
    """Fires when the weighted mean of the last trials' error norms lies too far above the level.

    The weighted mean (Roberts 1959) of ln(norm) in units of its scatter, held at zero from below,
    so that a falling error gives no credit. Slower than the CUSUM on a jump, surer on slow growth.
    """

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT
    NAME: ClassVar[str] = "ewma"
    CHARTS: ClassVar[int] = 1
    KEPT: ClassVar[str] = "mean"

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

    def add(self, before: float, score: float) -> float:
        return ewma_step_up(before, score, self.weight)

    def limit(self, run_length: float) -> float:
        return ewma_up_limit(self.weight, run_length) * ewma_sigma(self.weight)

    def words(self, total: float, limit: float) -> str:
        return (
            f"their weighted mean lies {total:.3g} standard deviations above it, "
            f"the limit is {limit:.4g}"
        )
