"""Error growth: is learning making the error larger?"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from statistics import median
from typing import Any, ClassVar

from trialrunner.core.bounds import STRICT, AboveOne, Count, NonNegative, PositiveCount
from trialrunner.core.guards import Action, GuardContext, Report, rose
from trialrunner.core.scatter import allowance
from trialrunner.core.trial import GuardResult, Memory, Purpose, Trial

LEVEL_TRIALS = 5
"""Trials in a row whose median counts as a level for good. The best single trial of a long run is
a lucky one; a limit drawn from it would fire on a healthy rig."""

LATELY_TRIALS = 8
LATELY_MEDIAN = 3
"""While the error still falls a median of five lags two trials behind. So the smallest median of
three within the last eight counts as well."""


@dataclass(frozen=True, kw_only=True)
class ErrorGrowth:
    """Fires when the error norm leaves the level once reached, or keeps rising.

    The level is the smallest median of five trials in a row so far, or of three lately. The limits
    are multiples of it, widened by the scatter of the norm from trial to trial (core/scatter.py).
    With the defaults one run in 50 of 300 simulated trials had a false alarm at 20 % scatter, one
    in 500 at 15 %. Judges learning trials only: in all others the feedforward is not the fruit of
    the last update.
    """

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT
    NAME: ClassVar[str] = "error_growth"

    enabled: bool = True
    ratio: AboveOne = 1.5
    """Largest error norm as a multiple of the level reached."""
    trials_above: PositiveCount = 2
    """Trials in a row above it before the guard fires."""
    jump_ratio: AboveOne = 2.0
    """Multiple of the level beyond which it fires at once; never below `ratio`."""
    scatter_factor: NonNegative = 3.0
    """Standard deviations of the norm's scatter by which all limits here are widened; 0: none."""
    action: Action = "roll back"
    growth_trials: PositiveCount = 6
    """Trials in a row, each with a larger error norm than the one before, that count as growth."""
    growth_factor: AboveOne = 1.4
    """Smallest rise over these trials that counts."""
    growth_action: Action = "freeze"
    warm_up_trials: Count = 3
    """Trials before the guard speaks: at first, and after an operator rolled back or resumed."""
    ignore_below: NonNegative = 0.0
    """Error norms up to this are never growth."""

    def judge(self, trial: Trial, context: GuardContext, memory: Memory) -> GuardResult:
        level = _number(memory, "level", math.inf)
        if trial.purpose is not Purpose.LEARN:
            return self._report(level, 0).passed()
        norms = (*context.recent_norms, context.error_norm)
        factor = context.error_norm / _reference(level, context)
        wider = allowance(context.recent_norms, self.scatter_factor)
        ratio, at_once = self.ratio * wider, max(self.jump_ratio, self.ratio) * wider
        above = int(_number(memory, "above", 0)) + 1 if factor > ratio else 0
        level = min(level, _lowest_median(norms[-LEVEL_TRIALS:], LEVEL_TRIALS))
        if len(norms) <= self.warm_up_trials or context.error_norm <= self.ignore_below:
            return self._report(level, 0).passed()
        if above >= self.trials_above or factor > at_once:
            reached = context.error_norm / factor
            limit = at_once if factor > at_once else ratio
            reason = (
                f"the error norm is {context.error_norm:.4g}, {factor:.3g} times the level "
                f"{reached:.4g} reached before; the limit is {limit:.4g} times"
                f"{f' for {above} trials in a row' if above > 1 else ''}{_said(wider)}"
            )
            return self._report(level, 0).fired(self.action, reason, factor, limit)
        return self._steady_growth(norms, wider, self._report(level, above))

    def _steady_growth(self, norms: Sequence[float], wider: float, report: Report) -> GuardResult:
        run = norms[-1 - self.growth_trials :]
        if not rose(run, self.growth_trials):
            return report.passed()
        factor = run[-1] / run[0] if run[0] > 0 else math.inf
        limit = self.growth_factor * wider
        if factor < limit:
            return report.passed()
        reason = (
            f"the error norm rose {self.growth_trials} trials in a row, from {run[0]:.4g} to "
            f"{run[-1]:.4g}, {factor:.3g} times; the limit is {limit:.4g} times{_said(wider)}"
        )
        return report.fired(self.growth_action, reason, factor, limit)

    def _report(self, level: float, above: int) -> Report:
        return Report(self.NAME, {"level": level, "above": above})


def _said(wider: float) -> str:
    return f", widened by {wider:.3g} for the scatter from trial to trial" if wider > 1.0 else ""


def _number(memory: Memory, key: str, default: float) -> float:
    value = memory.get(key, default)
    return default if isinstance(value, str | list) else float(value)


def _reference(level: float, context: GuardContext) -> float:
    """What the error norm is compared with; with fewer than three trials, their median."""
    norms = context.recent_norms[-LATELY_TRIALS:]
    lately = _lowest_median(norms, min(LATELY_MEDIAN, len(norms)) or 1)
    # A norm of exactly 0 cannot be grown from by a factor; anything above it is beyond any.
    return max(min(level, lately), 5e-324)


def _lowest_median(norms: Sequence[float], trials: int) -> float:
    """Smallest median of so many norms in a row; infinity if there are fewer."""
    ends = range(trials, len(norms) + 1)
    return min((median(norms[end - trials : end]) for end in ends), default=math.inf)
