"""Saturation: share of limited samples, and its rise without a falling error."""

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from trialrunner.core.guards.saturation import Saturation
from trialrunner.core.trial import GuardResult, Level, Purpose

Make = Callable[..., Any]


def mask(share: float, n_samples: int = 400) -> np.ndarray:
    limited = np.zeros((n_samples, 1), dtype=bool)
    limited[: round(share * n_samples)] = True
    return limited


@pytest.fixture
def judge_series(make_trial: Make, make_context: Make) -> Callable[..., list[Level]]:
    """Levels on a series of (share reported by the rig, error norm)."""

    def run(series: list[tuple[float, float]], guard: Saturation) -> list[Level]:
        memory: Any = {}
        levels = []
        for share, norm in series:
            result: GuardResult = guard.judge(
                make_trial(limited=mask(share)), make_context(error_norm=norm), memory
            )
            memory = result.memory
            levels.append(result.verdict.level)
        return levels

    return run


def test_a_share_above_the_limit_warns(make_trial: Make, make_context: Make) -> None:
    """The reason names the input, the share and the limit."""
    verdict = Saturation().judge(make_trial(limited=mask(0.6)), make_context(), {}).verdict
    assert verdict.level is Level.WARN
    for part in ("input force", "0.6", "0.5"):
        assert part in verdict.reason
    half = Saturation().judge(make_trial(limited=mask(0.5)), make_context(), {}).verdict
    assert half.level is Level.PASS, "at the limit is not above it"


def test_the_daemons_cuts_count_as_well_and_once(make_trial: Make, make_context: Make) -> None:
    """Samples cut by the daemon and reported by the rig are counted together, not twice."""
    guard = Saturation(share=0.45, action="freeze")
    both = guard.judge(make_trial(limited=mask(0.4)), make_context(clipped=mask(0.4)), {}).verdict
    assert both.level is Level.PASS
    rest = guard.judge(make_trial(limited=mask(0.4)), make_context(clipped=~mask(0.9)), {}).verdict
    assert rest.level is Level.FREEZE
    assert rest.value == pytest.approx(0.5)


def test_the_soft_start_does_not_count_as_cutting(make_trial: Make, make_context: Make) -> None:
    """While the limits still rise the daemon cuts on purpose; the rig's own reports count."""
    rising = make_context(clipped=mask(0.9), limits_rising=True)
    assert Saturation().judge(make_trial(), rising, {}).verdict.level is Level.PASS
    told = Saturation().judge(make_trial(limited=mask(0.9)), rising, {}).verdict
    assert told.level is Level.WARN


def test_a_rising_share_without_a_falling_error_freezes(
    judge_series: Any, make_trial: Make, make_context: Make
) -> None:
    """Five rises in a row while the error norm stays: learning only presses on the limit."""
    series = [(0.1 + 0.02 * k, 1.0) for k in range(6)]
    assert judge_series(series, Saturation()) == [Level.PASS] * 5 + [Level.FREEZE]
    memory = {"shares": [s for s, _ in series[:5]], "norms": [1.0] * 5}
    guard, context = Saturation(), make_context(error_norm=1.1)
    verdict = guard.judge(make_trial(limited=mask(0.2)), context, memory).verdict
    for part in ("5 trials in a row", "0.1 to 0.2", "limit of the rise 0.05", "1 to 1.1"):
        assert part in verdict.reason
    assert (verdict.value, verdict.limit) == (pytest.approx(0.1), 0.05)


def test_a_rising_share_with_a_falling_error_passes(judge_series: Any) -> None:
    """A feedforward on its way to what the rig needs touches its limits more and more."""
    series = [(0.02 * k, 10.0 * 0.8**k) for k in range(20)]
    assert judge_series(series, Saturation()) == [Level.PASS] * 20


@pytest.mark.parametrize("seed", range(5))
def test_a_share_that_scatters_passes(judge_series: Any, seed: int) -> None:
    """A healthy rig at its floor: neither share nor error has a direction."""
    rng = np.random.default_rng(seed)
    series = [(0.2 + 0.01 * float(a), 1.0 + 0.05 * float(b)) for a, b in rng.normal(size=(300, 2))]
    assert set(judge_series(series, Saturation())) == {Level.PASS}


def test_a_tiny_rise_passes(judge_series: Any) -> None:
    """A few samples more in each trial are not a rising share."""
    series = [(0.1 + 0.0025 * k, 1.0) for k in range(8)]
    assert set(judge_series(series, Saturation())) == {Level.PASS}


def test_only_learning_trials_are_judged(make_trial: Make, make_context: Make) -> None:
    """Frozen repeats and probes say nothing about learning; the memory stays."""
    memory = {"shares": [0.1], "norms": [1.0]}
    for purpose in (Purpose.PROBE, Purpose.CONFIRM, Purpose.FLOOR, Purpose.BASELINE):
        trial = make_trial(limited=mask(1.0), purpose=purpose)
        result = Saturation().judge(trial, make_context(), memory)
        assert result.verdict.level is Level.PASS
        assert result.memory == memory


def test_the_memory_stays_small(judge_series: Any, make_trial: Make, make_context: Make) -> None:
    """However long the run, only the trials that the rule needs are kept."""
    memory: Any = {}
    for _ in range(50):
        memory = Saturation(rising_trials=3).judge(make_trial(), make_context(), memory).memory
    assert [len(memory[key]) for key in ("shares", "norms")] == [4, 4]


def test_the_worst_input_of_two_is_named(make_trial: Make, make_context: Make) -> None:
    """The share is that of one input, not of all together."""
    inputs = make_context().inputs
    context = make_context(
        inputs=(*inputs, inputs[0].__class__(name="torque", unit="N.m", low=-1.0, high=1.0)),
        clipped=np.zeros((400, 2), dtype=bool),
    )
    limited = np.hstack([mask(0.0), mask(0.7)])
    verdict = Saturation().judge(make_trial(limited=limited), context, {}).verdict
    assert "input torque" in verdict.reason
    assert verdict.value == pytest.approx(0.7)
