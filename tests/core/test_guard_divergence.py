"""Divergence: hard limits on norm and peaks."""

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from trialrunner.core.errors import SettingError
from trialrunner.core.guards.divergence import Divergence
from trialrunner.core.trial import Level, Purpose, Verdict

Make = Callable[..., Any]


def assert_fired(verdict: Verdict, level: Level, *parts: str) -> None:
    """Fired at this level, not void, with number, limit and the given parts."""
    assert verdict.level is level
    assert not verdict.void
    for part in (*parts, f"{verdict.value:.4g}", f"{verdict.limit:.4g}"):
        assert part in verdict.reason


def test_a_healthy_run_passes(make_trial: Make, make_context: Make) -> None:
    """Errors that fall, and a first trial without anything to compare with."""
    for norm, first in ((3.0, math.nan), (3.0, 3.0), (0.1, 3.0), (14.9, 3.0)):
        context = make_context(error_norm=norm, first_norm=first)
        assert Divergence().judge(make_trial(), context, {}).verdict.level is Level.PASS


def test_a_norm_far_above_the_first_halts(make_trial: Make, make_context: Make) -> None:
    """Five times the first trial's error norm is the default limit."""
    context = make_context(error_norm=15.5, first_norm=3.0)
    verdict = Divergence().judge(make_trial(), context, {}).verdict
    assert_fired(verdict, Level.HALT, "15.5", "15", "first trial")


def test_a_norm_above_its_limit_fires_as_configured(make_trial: Make, make_context: Make) -> None:
    """The absolute limit acts from the first trial on, with the configured rung."""
    guard = Divergence(norm_limit=2.0, action="roll back")
    verdict = guard.judge(make_trial(), make_context(error_norm=2.5), {}).verdict
    assert_fired(verdict, Level.ROLL_BACK, "2.5", "limit is 2")


def test_a_peak_above_its_limit_fires(make_trial: Make, make_context: Make) -> None:
    """One sample is enough, in the output's unit, whatever the norm."""
    trial = make_trial()
    output = trial.output.copy()
    output[200, 0] = -20.0
    guard = Divergence(peak_limits={"x": 25.0})
    verdict = guard.judge(make_trial(output=output), make_context(), {}).verdict
    assert_fired(verdict, Level.HALT, "output x", "30 mm", "25 mm")
    assert guard.judge(trial, make_context(), {}).verdict.level is Level.PASS


def test_exactly_at_a_limit_is_within_it(make_trial: Make, make_context: Make) -> None:
    """Norm, ratio and peak alike."""
    trial = make_trial()
    peak = float(np.max(np.abs(trial.error)))
    guard = Divergence(norm_limit=2.0, peak_limits={"x": peak})
    context = make_context(error_norm=2.0, first_norm=0.4)
    assert guard.judge(trial, context, {}).verdict.level is Level.PASS
    tighter = Divergence(peak_limits={"x": 0.999 * peak})
    assert tighter.judge(trial, context, {}).verdict.level is Level.HALT


def test_a_probe_is_only_held_to_the_absolute_limits(make_trial: Make, make_context: Make) -> None:
    """An experiment of the law may exceed the first trial, never a stated limit."""
    probe = make_trial(purpose=Purpose.PROBE)
    context = make_context(error_norm=100.0, first_norm=1.0)
    assert Divergence().judge(probe, context, {}).verdict.level is Level.PASS
    verdict = Divergence(norm_limit=50.0).judge(probe, context, {}).verdict
    assert_fired(verdict, Level.HALT, "100", "50")


def test_a_first_trial_without_error_sets_no_limit(make_trial: Make, make_context: Make) -> None:
    """A multiple of zero would forbid everything."""
    context = make_context(error_norm=0.1, first_norm=0.0)
    assert Divergence().judge(make_trial(), context, {}).verdict.level is Level.PASS
    context = make_context(error_norm=5.1, first_norm=1.0)
    assert Divergence().judge(make_trial(), context, {}).verdict.level is Level.HALT


def test_a_limit_for_an_unknown_output_is_refused(make_context: Make) -> None:
    """A misspelt channel name is an error, not a limit that never acts."""
    with pytest.raises(SettingError, match="peak_limits"):
        Divergence(peak_limits={"force": 1.0}).check_channels(make_context().outputs)
