"""What the control charts on the error norm share: the level they compare with and its scatter."""

import math
from collections.abc import Sequence
from functools import lru_cache
from statistics import median
from typing import ClassVar

from trialrunner.core.charts import Level, per_chart, robust_level
from trialrunner.core.guards import Action, GuardContext, Report
from trialrunner.core.scatter import MAD_TO_SIGMA
from trialrunner.core.trial import GuardResult, Memory, Purpose, Trial

WINDOW_TRIALS = 48
"""Trials that the level is taken from. A rig's slow drift moves the level with it; growth by more
than about a tenth of the scatter each trial leaves it behind and shows."""

SETTLED = 1.0
"""Spreads by which the older half of the window may lie above the newer half: beyond that the
error is still falling and the oldest trials say nothing about what to expect."""

HIGHEST_SCORE = 4.0
"""One outlier alone never signals; a jump is for `error_growth` and `divergence`."""


def level_before(context: GuardContext, warm_up: int, least_spread: float) -> Level | None:
    """Level of ln(error norm) before this trial; None while too few trials were seen."""
    return _level(context.recent_norms[-WINDOW_TRIALS:], warm_up, least_spread)


@lru_cache(maxsize=8)
def _level(norms: tuple[float, ...], warm_up: int, least_spread: float) -> Level | None:
    """Remembered, because each chart asks for the same one."""
    logs = [math.log(norm) for norm in norms if norm > 0.0]
    if len(logs) < warm_up:
        return None
    while len(logs) > warm_up and _falling(logs, least_spread):
        logs = logs[1:]
    return robust_level(logs, least_spread)


def _falling(logs: Sequence[float], least_spread: float) -> bool:
    half = len(logs) // 2
    older, newer = median(logs[:half]), logs[half:]
    centre = median(newer)
    spread = MAD_TO_SIGMA * median(abs(value - centre) for value in newer)
    return older - centre > SETTLED * max(spread, least_spread)


def score_of(context: GuardContext, level: Level) -> float:
    """Normal score of this trial's error norm, bounded above."""
    if not context.error_norm > 0.0:
        return -HIGHEST_SCORE
    return min(level.score(math.log(context.error_norm)), HIGHEST_SCORE)


class NormChart:
    """What a chart of growth on ln(norm) asks and remembers; a child adds its sum and its limit.

    The settings stand in the child, each with its description: those of a base would be lost.
    """

    NAME: ClassVar[str]
    KEPT: ClassVar[str]
    """Name of the child's sum in its memory."""

    action: Action
    false_alarm_trials: float
    warm_up_trials: int
    least_spread: float

    def add(self, before: float, score: float) -> float:
        """The sum with one more trial's score; never below zero."""
        raise NotImplementedError

    def limit(self, run_length: float) -> float:
        """What the sum may reach, for this mean number of trials between false alarms."""
        raise NotImplementedError

    def words(self, total: float, limit: float) -> str:
        """How the sum stands to its limit."""
        raise NotImplementedError

    def judge(self, trial: Trial, context: GuardContext, memory: Memory) -> GuardResult:
        level = level_before(context, self.warm_up_trials, self.least_spread)
        if level is None or trial.purpose is not Purpose.LEARN:
            # Only what follows from the last update is compared, frozen or not.
            return self._report(0.0, -1).passed()
        before, first = _number(memory, self.KEPT, 0.0), int(_number(memory, "first", -1))
        total = self.add(before, score_of(context, level))
        first = trial.index if before == 0.0 else first
        limit = self.limit(per_chart(self.false_alarm_trials, context.n_charts))
        if total <= limit:
            return self._report(total, first).passed()
        compared = comparison(context, level, first, trial.index)
        reason = f"{compared}; {self.words(total, limit)}"
        return self._report(0.0, -1).fired(self.action, reason, total, limit)

    def _report(self, total: float, first: int) -> Report:
        return Report(self.NAME, {self.KEPT: total, "first": first if total > 0.0 else -1})


def _number(memory: Memory, key: str, default: float) -> float:
    value = memory.get(key, default)
    return default if isinstance(value, str | list) else float(value)


def comparison(context: GuardContext, level: Level, first: int, last: int) -> str:
    """The words for what was compared with what."""
    trials = f"trials {first} to {last}" if last > first else f"trial {last}"
    return (
        f"{trials} lie above the level {math.exp(level.centre):.4g} of {level.n_trials} trials "
        f"before (scatter {100.0 * math.expm1(level.spread):.3g} %); the error norm is "
        f"{context.error_norm:.4g} now"
    )
