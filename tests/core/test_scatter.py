"""Scatter of the error norm from trial to trial: what counts as chance and what does not."""

import math

import numpy as np
import pytest

from trialrunner.core.scatter import MAX_SCATTER, allowance, log_scatter


@pytest.mark.parametrize("sigma", [0.01, 0.05, 0.1, 0.2])
def test_it_recovers_the_scatter_that_was_put_in(sigma: float) -> None:
    """On average over many windows of 32 trials, within a tenth."""
    norms = np.exp(sigma * np.random.default_rng(0).standard_normal((300, 32)))
    assert np.mean([log_scatter(row) for row in norms.tolist()]) == pytest.approx(sigma, rel=0.1)


@pytest.mark.parametrize("rate", [0.5, 0.9, 1.0, 1.2, 3.0])
def test_a_steady_trend_is_no_scatter(rate: float) -> None:
    """A fall or a growth by the same factor in each trial."""
    assert log_scatter([2.0 * rate**k for k in range(20)]) == pytest.approx(0.0, abs=1e-12)


def test_a_few_outliers_do_not_move_it() -> None:
    """One trial in ten three times too large."""
    rng = np.random.default_rng(1)
    norms = np.exp(0.05 * rng.standard_normal(32))
    clean = log_scatter(norms.tolist())
    norms[[5, 17, 29]] *= 3.0
    assert log_scatter(norms.tolist()) < 2.0 * clean


def test_only_the_last_trials_count() -> None:
    """A wild beginning is forgotten."""
    wild = np.exp(np.random.default_rng(2).standard_normal(50)).tolist()
    assert log_scatter([*wild, *[1.0] * 32]) == 0.0


def test_too_few_trials_or_a_perfect_one_tell_nothing() -> None:
    """Then no limit is widened."""
    assert log_scatter([1.0, 2.0, 1.0, 2.0]) == 0.0
    assert log_scatter([1.0, 2.0, 0.0, 2.0, 1.0, 3.0]) == 0.0
    assert log_scatter([]) == 0.0
    assert allowance([], 3.0) == 1.0


def test_it_cannot_switch_a_limit_off() -> None:
    """A wildly alternating error norm widens by a bounded factor."""
    assert log_scatter([1.0, 100.0] * 10) == MAX_SCATTER
    assert allowance([1.0, 100.0] * 10, 3.0) == math.exp(3.0 * MAX_SCATTER)


def test_the_allowance_is_that_many_deviations() -> None:
    """A factor on the norm; none for zero deviations."""
    norms = np.exp(0.1 * np.random.default_rng(3).standard_normal(32)).tolist()
    assert allowance(norms, 2.0) == pytest.approx(math.exp(2.0 * log_scatter(norms)))
    assert allowance(norms, 0.0) == 1.0
