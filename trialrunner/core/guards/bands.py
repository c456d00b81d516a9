"""Bands: does the error grow at some frequencies while the whole of it still looks fine?"""

import math
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from trialrunner.core.bands import band_levels, octave_edges_hz
from trialrunner.core.bounds import STRICT, AboveOne, Positive, PositiveCount
from trialrunner.core.charts import cusum_limit, cusum_step, per_chart
from trialrunner.core.guards import Action, GuardContext, Report
from trialrunner.core.trial import Array, GuardResult, Memory, Purpose, Trial

SLACK = 0.5
"""Standard deviations; half the growth looked for."""

HIGHEST_SCORE = 4.0
"""One odd trial alone never signals."""

MEMORY_TRIALS = 20
"""Trials over which level and scatter of a band are averaged, with ever less weight on old ones."""

FALLING_WEIGHT = 0.3
"""Weight of a trial far below the level: while the error falls, the level follows at once."""

LEAST_SPREAD = 0.08
"""Scatter of ln(level) that a band is always allowed."""

SUSPICION = 2.0
"""Sum of excesses, in standard deviations, from which a band's scatter stays as it was."""

WIDENING = 2.0
"""Standard deviations of a band's scatter by which the allowed growth is widened: the lowest bands
hold few cosines and scatter by a third from trial to trial."""

MEAN_TO_SIGMA = math.sqrt(math.pi / 2.0)
"""Mean absolute deviation to standard deviation, for normal noise."""

DRIVEN = 1.25
"""Growth of the feedforward in the same band that makes learning the likely cause."""

LEAST_PUSH = 1e-6
"""Share of an input's range; growth is counted from there if there was less."""

TINY = 1e-300


@dataclass(frozen=True, kw_only=True)
class Bands:
    """Fires when the error in an octave of frequency grows and stays above its level.

    Learning that diverges does so at high frequency first, many trials before the error norm moves.
    A band must have left its level by more than its scatter explains (CUSUM) and be `growth`
    times as large, or more where it scatters. If the feedforward has grown there as well, learning
    drives it and `action` is asked for, with a bandwidth of the Q-filter that would have prevented
    it; otherwise rig or sensor changed, which is worth a warning.
    """

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT
    NAME: ClassVar[str] = "bands"
    CHARTS: ClassVar[int] = 1

    enabled: bool = True
    action: Action = "freeze"
    growth: AboveOne = 1.6
    """Error in a band as a multiple of its level there, below which nothing is said; widened by
    the band's scatter."""
    false_alarm_trials: Positive = 5000.0
    """Wished mean number of trials between false alarms of all charts of a run together."""
    warm_up_trials: PositiveCount = 12
    """Learning trials before it judges."""

    def judge(self, trial: Trial, context: GuardContext, memory: Memory) -> GuardResult:
        if trial.purpose is not Purpose.LEARN:
            return Report(self.NAME, memory).passed()
        error = np.log(np.maximum(_error_levels(trial, context), TINY))
        pushed = _feedforward_levels(trial, context)
        before = _Seen.of(memory, error, pushed)
        score = np.minimum((error - before.level) / before.spread, HIGHEST_SCORE)
        sums = np.array([cusum_step(*pair, SLACK) for pair in zip(before.sums, score, strict=True)])
        if before.n_trials < self.warm_up_trials:
            return before.after(error, pushed, np.zeros(sums.shape)).report().passed()
        n_charts = context.n_charts - self.CHARTS + sums.size
        limit = cusum_limit(SLACK, per_chart(self.false_alarm_trials, n_charts))
        grown = np.exp(error - before.level)
        most = self.growth * np.exp(WIDENING * before.spread)
        odd = (sums > limit) & (grown > most)
        if not odd.any():
            return before.after(error, pushed, sums).report().passed()
        worst = int(np.argmax(np.where(odd, grown, 0.0)))
        driven = float(pushed[worst] / max(before.pushed[worst], LEAST_PUSH))
        factor, allowed = float(grown[worst]), float(most[worst])
        reason = _reason(trial, context, worst, (factor, allowed, driven), before)
        report = before.after(error, pushed, np.where(odd, 0.0, sums)).report()
        action = self.action if driven >= DRIVEN else "warn"
        return report.fired(action, reason, factor, allowed)


@dataclass(frozen=True)
class _Seen:
    """What is remembered of each band, (n_bands,)."""

    n_trials: int
    level: Array
    """Natural logarithm of the error, averaged."""
    spread: Array
    sums: Array
    pushed: Array
    """The feedforward, averaged: plainly, because it begins at zero."""

    @classmethod
    def of(cls, memory: Memory, error: Array, pushed: Array) -> "_Seen":
        def kept(key: str, default: Array) -> Array:
            values = memory.get(key)
            same = isinstance(values, list) and len(values) == error.size
            return np.array(values) if same else default

        n_trials = memory.get("trials", 0)
        return cls(
            n_trials=n_trials if isinstance(n_trials, int) else 0,
            level=kept("level", error),
            spread=kept("spread", np.full(error.shape, LEAST_SPREAD)),
            sums=kept("sums", np.zeros(error.shape)),
            pushed=kept("pushed", pushed),
        )

    def after(self, error: Array, pushed: Array, sums: Array) -> "_Seen":
        """With one more trial; outliers upwards count as two standard deviations."""
        n_trials = min(self.n_trials + 1, MEMORY_TRIALS)
        weight = 1.0 / n_trials
        away = np.minimum(error - self.level, 2.0 * self.spread)
        size = MEAN_TO_SIGMA * np.abs(np.maximum(away, -3.0 * self.spread))
        # A growth under suspicion must not pass for scatter.
        size = np.where(sums > SUSPICION, self.spread, size)
        faster = np.where(away < -2.0 * self.spread, max(weight, FALLING_WEIGHT), weight)
        return _Seen(
            n_trials=n_trials,
            level=self.level + faster * away,
            spread=np.maximum(self.spread + weight * (size - self.spread), LEAST_SPREAD),
            sums=sums,
            pushed=self.pushed + weight * (pushed - self.pushed),
        )

    def report(self) -> Report:
        memory: dict[str, float | int | str | list[float]] = {"trials": self.n_trials}
        for key in ("level", "spread", "sums", "pushed"):
            memory[key] = getattr(self, key).tolist()
        return Report(Bands.NAME, memory)


def _error_levels(trial: Trial, context: GuardContext) -> Array:
    scales = np.array([channel.scale for channel in context.outputs])
    return band_levels(trial.error, scales, context.period_s)


def _feedforward_levels(trial: Trial, context: GuardContext) -> Array:
    """In shares of each input's range."""
    ranges = [channel.high - channel.low for channel in context.inputs]
    scales = np.array([one if 0.0 < one < math.inf else 1.0 for one in ranges])
    return band_levels(trial.feedforward, scales, context.period_s)


def _reason(
    trial: Trial, context: GuardContext, band: int, numbers: tuple[float, float, float], seen: _Seen
) -> str:
    factor, limit, driven = numbers
    edges = octave_edges_hz(len(trial.output), context.period_s)
    low, high = edges[band], edges[band + 1]
    start = (
        f"the error between {low:.4g} and {high:.4g} Hz is {factor:.3g} times its level over the "
        f"{seen.n_trials} learning trials before; the limit is {limit:.3g} times"
    )
    if driven < DRIVEN:
        return f"{start}; the feedforward there is {driven:.3g} times its level: look at the rig"
    if band == 0:
        return f"{start}; the feedforward there grew {driven:.3g} times: reduce the law's gain"
    advice = prevention_hz(low, factor, seen.n_trials)
    return (
        f"{start}; the feedforward there grew {driven:.3g} times: a Q-filter bandwidth of at most "
        f"{advice:.3g} Hz would have prevented it"
    )


def prevention_hz(low_hz: float, growth: float, n_trials: int) -> float:
    """-3 dB bandwidth of a Gaussian Q-filter that holds a growing band from `low_hz` upwards.

    The averaged level lies about half the averaged trials back, which gives the growth a trial, g;
    learning there stops growing where |Q| < 1 / g, and |Q| = 2^(-(f / bandwidth)^2 / 2).
    """
    a_trial = growth ** (2.0 / n_trials)
    return low_hz / max(1.0, math.sqrt(2.0 * math.log2(a_trial)))
