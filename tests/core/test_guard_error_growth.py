"""Error growth: a series of error norms is judged as the daemon would, one by one."""

import math
from collections.abc import Callable, Iterable
from typing import Any

import numpy as np
import pytest

from trialrunner.core.guards.error_growth import ErrorGrowth
from trialrunner.core.run_state import RECENT_NORMS
from trialrunner.core.trial import Level, Purpose, Verdict

Make = Callable[..., Any]


def plain(**settings: Any) -> ErrorGrowth:
    """The guard without widening for scatter, so that the limits are round numbers."""
    return ErrorGrowth(scatter_factor=0.0, **settings)


PLAIN = plain()


@pytest.fixture
def judge(make_trial: Make, make_context: Make) -> Callable[..., list[Verdict]]:
    """Verdicts on a series of norms, with the bookkeeping of a run that ignores them."""

    def run(
        norms: Iterable[float], guard: ErrorGrowth, purposes: dict[int, Purpose] | None = None
    ) -> list[Verdict]:
        memory: Any = {}
        seen: list[float] = []
        verdicts = []
        for k, norm in enumerate(norms):
            purpose = (purposes or {}).get(k, Purpose.LEARN)
            context = make_context(
                error_norm=float(norm),
                best_norm=min(seen, default=math.inf),
                recent_norms=tuple(seen[-RECENT_NORMS:]),
            )
            result = guard.judge(make_trial(purpose=purpose), context, memory)
            memory = result.memory
            verdicts.append(result.verdict)
            seen.append(float(norm))
        return verdicts

    return run


def fired(verdicts: list[Verdict]) -> list[tuple[int, Level]]:
    return [(k, v.level) for k, v in enumerate(verdicts) if v.level]


def test_convergence_passes(judge: Any) -> None:
    """A falling error never fires."""
    assert fired(judge(10.0 * 0.7 ** np.arange(30), PLAIN)) == []


@pytest.mark.parametrize("seed", range(5))
@pytest.mark.parametrize("scatter", [0.02, 0.1, 0.15])
def test_a_healthy_rig_passes_at_its_floor(judge: Any, seed: int, scatter: float) -> None:
    """Convergence to a floor at which the norm scatters by up to 15 % (one sigma), 300 trials."""
    rng = np.random.default_rng(seed)
    norms = (0.5 + 9.5 * 0.6 ** np.arange(300)) * np.exp(scatter * rng.standard_normal(300))
    assert fired(judge(norms, ErrorGrowth())) == []


@pytest.mark.parametrize(("scatter", "most"), [(0.02, 3), (0.1, 4), (0.2, 6)])
def test_growth_is_caught_in_spite_of_scatter(judge: Any, scatter: float, most: int) -> None:
    """Growth by half a trial from trial 40 on, at the floor of a quiet and of a noisy rig."""
    rng = np.random.default_rng(0)
    trend = np.concatenate([10 * 0.6 ** np.arange(12) + 1, np.ones(28), 1.5 ** np.arange(1, 20)])
    alarms = fired(judge(trend * np.exp(scatter * rng.standard_normal(59)), ErrorGrowth()))
    assert alarms[0][1] is Level.ROLL_BACK
    assert 40 <= alarms[0][0] < 40 + most


def test_the_reason_says_by_how_much_the_limit_was_widened(judge: Any) -> None:
    """Else nobody could tell where a limit of 1.9 comes from."""
    norms = [*(1 + 0.1 * (-1.0) ** np.arange(20)), 5.0]
    verdict = judge(norms, ErrorGrowth())[-1]
    assert verdict.level is Level.ROLL_BACK
    assert verdict.limit > 2.0
    for part in (f"limit is {verdict.limit:.4g} times", "widened by", "scatter"):
        assert part in verdict.reason


def test_growth_after_convergence_rolls_back_at_the_second_trial_above(judge: Any) -> None:
    """The level is 0.5, the limit 1.5 times it: the second trial in a row above it fires."""
    verdicts = judge([10, 3, 1, 0.5, 0.5, 0.5, 0.8, 0.9], PLAIN)
    assert fired(verdicts) == [(7, Level.ROLL_BACK)]
    verdict = verdicts[-1]
    assert (verdict.value, verdict.limit) == (pytest.approx(1.8), 1.5)
    for part in ("norm is 0.9", "1.8 times", "0.5", "1.5 times", "2 trials in a row"):
        assert part in verdict.reason


def test_one_outlier_is_forgiven(judge: Any) -> None:
    """A single trial above the ratio, then back: nothing fires, and counting starts again."""
    assert fired(judge([1, 1, 1, 1, 1.8, 1, 1.8, 1, 1.8], PLAIN)) == []


def test_a_jump_fires_at_once(judge: Any) -> None:
    """More than twice the level does not wait for a second trial."""
    assert fired(judge([1, 1, 1, 1, 2.0], PLAIN)) == []
    verdicts = judge([1, 1, 1, 1, 2.5], PLAIN)
    assert fired(verdicts) == [(4, Level.ROLL_BACK)]
    assert "2.5 times" in verdicts[-1].reason
    assert "limit is 2 times" in verdicts[-1].reason


def test_a_larger_ratio_is_not_undercut_by_the_jump(judge: Any) -> None:
    """Asking for a ratio of three means three."""
    assert fired(judge([1, 1, 1, 1, 2.9, 2.9, 2.9], plain(ratio=3.0))) == []
    assert fired(judge([1, 1, 1, 1, 3.1], plain(ratio=3.0))) == [(4, Level.ROLL_BACK)]


def test_growth_is_seen_while_the_error_has_just_stopped_falling(judge: Any) -> None:
    """The level follows a falling error closely enough to catch what comes right after."""
    assert fired(judge([2.35, 1.6, 1.13, 0.87, 0.90, 1.26, 2.01], PLAIN)) == [(6, Level.ROLL_BACK)]


def test_one_lucky_trial_is_not_the_level(judge: Any) -> None:
    """A trial that happens to be twice as good does not make the others look like growth."""
    assert fired(judge([1, 1, 1, 0.5, 1, 1, 1, 1, 1], PLAIN)) == []


def test_slow_steady_growth_freezes(judge: Any) -> None:
    """Six rises in a row of 6 % each stay under the ratio and still count, with the factor."""
    norms = [1, 1, *(1.06 ** np.arange(7))]
    verdicts = judge(norms, PLAIN)
    assert fired(verdicts) == [(8, Level.FREEZE)]
    for part in ("6 trials in a row", "from 1 to 1.419", "1.42 times", "1.4 times"):
        assert part in verdicts[-1].reason


def test_a_creep_below_the_factor_passes(judge: Any) -> None:
    """Six rises in a row that add up to little are chance."""
    assert fired(judge([1, 1, *(1.03 ** np.arange(7))], PLAIN)) == []


def test_nothing_fires_before_the_warm_up(judge: Any) -> None:
    """The first trials may do what they like; only then is growth growth."""
    assert fired(judge([1, 5, 25], plain(warm_up_trials=3))) == []
    slow = plain(warm_up_trials=4)
    assert fired(judge([1, 1, 1, 1.8, 1.8, 1.8], slow)) == [(5, Level.ROLL_BACK)]
    assert fired(judge([1, 5], plain(warm_up_trials=1))) == [(1, Level.ROLL_BACK)]


def test_small_errors_can_be_ignored(judge: Any) -> None:
    """Below the stated norm even a tenfold rise is nothing."""
    norms = [0.1, 0.1, 0.1, 0.1, 0.9, 0.9]
    assert fired(judge(norms, plain(ignore_below=0.9))) == []
    assert fired(judge(norms, PLAIN)) != []


@pytest.mark.parametrize("purpose", [p for p in Purpose if p is not Purpose.LEARN])
def test_only_learning_trials_are_judged(judge: Any, purpose: Purpose) -> None:
    """Baseline, probe, confirmation and floor trials never fire, and break a row."""
    norms = [1, 1, 1, 1, 1.8, 9.0, 1.8]
    assert fired(judge(norms, PLAIN, {5: purpose})) == []


def test_it_fires_again_only_after_a_new_row(judge: Any) -> None:
    """After it has fired the count starts anew, so the roll back gets its chance."""
    verdicts = judge([1, 1, 1, 1, 1.8, 1.8, 1.8, 1.8], PLAIN)
    assert [k for k, _ in fired(verdicts)] == [5, 7]


def test_a_perfect_trial_is_survived(judge: Any) -> None:
    """A norm of exactly zero divides nothing by zero."""
    verdicts = judge([0.0, 0.0, 0.0, 0.0, 1.0], PLAIN)
    assert fired(verdicts) == [(4, Level.ROLL_BACK)]


def test_actions_are_as_configured(judge: Any) -> None:
    """Both rules take any rung."""
    guard = plain(action="halt", growth_action="warn")
    assert fired(judge([1, 1, 1, 1, 9], guard)) == [(4, Level.HALT)]
    assert fired(judge([1, 1, *(1.06 ** np.arange(7))], guard)) == [(8, Level.WARN)]
