"""CUSUM and EWMA of the error norm: silent on a healthy rig, quick when the error grows."""

import math
from collections.abc import Callable, Iterator
from itertools import pairwise
from typing import Any

import numpy as np
import pytest

from trialrunner.core.guards.cusum import Cusum
from trialrunner.core.guards.ewma import Ewma
from trialrunner.core.trial import GuardResult, Level, Purpose, Verdict

Make = Callable[..., Any]
CHARTS = [Cusum(), Ewma()]


@pytest.fixture
def judge_norms(make_trial: Make, make_context: Make) -> Callable[..., list[Verdict]]:
    """Verdicts on a series of error norms, with the history that the run state would keep."""
    trial = make_trial()

    def run(norms: list[float], guard: Any, **fields: Any) -> list[Verdict]:
        memory: Any = {}
        verdicts = []
        for k, norm in enumerate(norms):
            context = make_context(
                error_norm=norm, recent_norms=tuple(norms[max(0, k - 64) : k]), n_charts=2
            )
            object.__setattr__(trial, "index", k)
            result: GuardResult = guard.judge(trial, context, memory, **fields)
            memory = result.memory
            verdicts.append(result.verdict)
        return verdicts

    return run


def scatter(n: int, seed: int, sigma: float = 0.15) -> Iterator[float]:
    return map(float, np.exp(sigma * np.random.default_rng(seed).standard_normal(n)))


def alarms(verdicts: list[Verdict]) -> list[int]:
    return [k for k, verdict in enumerate(verdicts) if verdict.level]


@pytest.mark.parametrize("guard", CHARTS, ids=["cusum", "ewma"])
@pytest.mark.parametrize("correlation", [0.0, 0.5])
def test_thousands_of_healthy_trials_alarm_no_more_often_than_wished(
    judge_norms: Any, guard: Any, correlation: float
) -> None:
    """4000 trials at a floor with 15 % scatter, also where one trial is like the one before: of the
    0.4 alarms that one chart of two may give in the mean, not more than 3 (above that has a
    probability of 1 in 1000)."""
    rng, norms, deviation = np.random.default_rng(5), [], 0.0
    for fresh in rng.standard_normal(4000):
        deviation = correlation * deviation + math.sqrt(1 - correlation**2) * float(fresh)
        norms.append(math.exp(0.15 * deviation))
    assert len(alarms(judge_norms(norms, guard))) <= 3


@pytest.mark.parametrize("guard", CHARTS, ids=["cusum", "ewma"])
@pytest.mark.parametrize("speed", [1.5, 6.0, 20.0])
def test_convergence_is_no_alarm(judge_norms: Any, guard: Any, speed: float) -> None:
    """An error that falls quickly or slowly to its floor never alarms on the way or after it."""
    for seed in range(5):
        floor = scatter(120, seed)
        norms = [(1.0 + 40.0 * math.exp(-k / speed)) * one for k, one in enumerate(floor)]
        assert alarms(judge_norms(norms, guard)) == []


@pytest.mark.parametrize("guard", CHARTS, ids=["cusum", "ewma"])
def test_a_doubled_error_is_found_within_six_trials(judge_norms: Any, guard: Any) -> None:
    """The reason gives the trials compared, level, scatter, number and limit."""
    for seed in range(5):
        norms = list(scatter(60, seed))
        norms[40:] = [2.0 * norm for norm in norms[40:]]
        verdicts = judge_norms(norms, guard)
        first = alarms(verdicts)[0]
        assert 40 <= first < 46
        said = verdicts[first]
        assert said.value > said.limit > 0
        for part in (f"to {first}", "the level", "scatter", f"{said.limit:.4g}"):
            assert part in said.reason


def test_slow_growth_is_found_before_the_error_doubles(judge_norms: Any) -> None:
    """3 % a trial at 10 % scatter: both charts speak within the 23 trials of a doubling."""
    for guard in CHARTS:
        norms = list(scatter(90, 3, 0.1))
        norms[50:] = [norm * 1.03**k for k, norm in enumerate(norms[50:])]
        assert 50 <= alarms(judge_norms(norms, guard))[0] < 73


def test_what_they_ask_for(judge_norms: Any) -> None:
    """By default the CUSUM freezes learning and the EWMA warns."""
    norms = [*scatter(40, 1), *(3.0 for _ in range(8))]
    assert max(verdict.level for verdict in judge_norms(norms, Cusum())) is Level.FREEZE
    assert max(verdict.level for verdict in judge_norms(norms, Ewma())) is Level.WARN


@pytest.mark.parametrize("guard", CHARTS, ids=["cusum", "ewma"])
def test_silent_until_enough_trials_were_seen(judge_norms: Any, guard: Any) -> None:
    """Early learning may do as it likes: that is for other guards."""
    assert alarms(judge_norms([1.0, 1.1, 0.9, 1.0, 9.0, 9.0, 9.0, 9.0, 9.0, 9.0], guard)) == []


@pytest.mark.parametrize("guard", CHARTS, ids=["cusum", "ewma"])
def test_a_single_outlier_is_no_alarm(judge_norms: Any, guard: Any) -> None:
    norms = list(scatter(60, 2))
    norms[40] *= 4.0
    assert alarms(judge_norms(norms, guard)) == []


@pytest.mark.parametrize("guard", CHARTS, ids=["cusum", "ewma"])
def test_more_charts_move_the_limit_out(make_trial: Make, make_context: Make, guard: Any) -> None:
    """The same wish for five charts instead of one needs wider limits on each."""
    norms = tuple(scatter(40, 1))
    limits = []
    for n_charts in (1, 5):
        memory: Any = {}
        for _ in range(30):
            context = make_context(error_norm=2.0, recent_norms=norms, n_charts=n_charts)
            result = guard.judge(make_trial(), context, memory)
            memory = result.memory
            if result.verdict.level:
                limits.append(result.verdict.limit)
                break
    assert limits[0] < limits[1]


@pytest.mark.parametrize("guard", CHARTS, ids=["cusum", "ewma"])
def test_probes_and_frozen_repeats_are_not_judged(
    make_trial: Make, make_context: Make, guard: Any
) -> None:
    """Their feedforward is not the fruit of the last update; what was added up is dropped."""
    context = make_context(error_norm=9.0, recent_norms=tuple(scatter(40, 1)))
    for purpose in (Purpose.PROBE, Purpose.CONFIRM, Purpose.FLOOR, Purpose.BASELINE):
        memory = guard.judge(make_trial(), context, {}).memory
        for _ in range(9):
            result = guard.judge(make_trial(purpose=purpose), context, memory)
            memory = result.memory
            assert result.verdict.level is Level.PASS
        assert memory["first"] == -1


def test_an_alarm_starts_the_sum_anew(judge_norms: Any) -> None:
    """One growth gives one alarm, not one at every later trial."""
    norms = list(scatter(70, 4))
    norms[50:] = [2.0 * norm for norm in norms[50:]]
    found = alarms(judge_norms(norms, Cusum()))
    assert found
    assert all(later - earlier > 1 for earlier, later in pairwise(found))


def test_a_perfect_series_is_no_alarm(judge_norms: Any) -> None:
    """Norms of exactly zero, or that never scatter, are handled: the least spread stands in."""
    for guard in CHARTS:
        assert alarms(judge_norms([0.0] * 40, guard)) == []
        assert alarms(judge_norms([1.0] * 40 + [1.05] * 3, guard)) == []
