"""Start guards: where and when the trial started."""

import math
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from trialrunner.core.guards.start import StartState, StartTiming
from trialrunner.core.trial import Level

Make = Callable[..., Any]


@pytest.mark.parametrize("away", [0.0, 0.2, -0.2])
def test_a_start_within_tolerance_passes(make_trial: Make, make_context: Make, away: float) -> None:
    """The tolerance is the channel's own, to either side."""
    trial = make_trial(start_state=np.array([away]))
    assert StartState().judge(trial, make_context(), {}).verdict.level is Level.PASS


@pytest.mark.parametrize("away", [0.21, -3.0, math.nan])
def test_a_start_elsewhere_voids(make_trial: Make, make_context: Make, away: float) -> None:
    """Too far off, or unknown: void, with distance and tolerance."""
    trial = make_trial(start_state=np.array([away]))
    verdict = StartState().judge(trial, make_context(), {}).verdict
    assert verdict.void
    assert verdict.guard == "start_state"
    for part in (f"{abs(away):.4g} mm", "0.2 mm", "output x"):
        assert part in verdict.reason


def test_the_start_is_measured_from_the_reference(make_trial: Make, make_context: Make) -> None:
    """Not from zero: a reference that starts at 10 expects the rig there."""
    trial = make_trial()
    shifted = replace(trial, reference=trial.reference + 10.0)
    assert StartState().judge(shifted, make_context(), {}).verdict.void
    there = replace(shifted, start_state=np.array([10.0]))
    assert not StartState().judge(there, make_context(), {}).verdict.void
    steep = replace(there, reference=there.reference + np.arange(400)[:, np.newaxis])
    assert not StartState().judge(steep, make_context(), {}).verdict.void, "sample 0 counts"


@pytest.mark.parametrize(("lateness_s", "word"), [(0.002, "late"), (-0.002, "early")])
def test_a_start_off_time_voids(
    make_trial: Make, make_context: Make, lateness_s: float, word: str
) -> None:
    """Beyond one and a half periods, late or early, with number and limit."""
    trial = make_trial(start_lateness_s=lateness_s)
    verdict = StartTiming().judge(trial, make_context(), {}).verdict
    assert verdict.void
    for part in (word, "0.002 s", "0.0015 s"):
        assert part in verdict.reason


def test_an_unknown_lateness_voids(make_trial: Make, make_context: Make) -> None:
    """NaN is never within a limit."""
    trial = make_trial(start_lateness_s=math.nan)
    verdict = StartTiming().judge(trial, make_context(), {}).verdict
    assert verdict.void
    assert verdict.value == math.inf, "the record keeps no NaN"


@pytest.mark.parametrize("lateness_s", [0.0, 0.001, -0.001, 0.0015])
def test_a_start_at_the_next_sample_passes(
    make_trial: Make, make_context: Make, lateness_s: float
) -> None:
    """A rig that can only start at a sample is up to one period off and healthy."""
    trial = make_trial(start_lateness_s=lateness_s)
    assert StartTiming().judge(trial, make_context(), {}).verdict.level is Level.PASS


def test_the_tighter_timing_limit_holds(make_trial: Make, make_context: Make) -> None:
    """A limit in seconds below the one in periods acts, and the other way round."""
    trial = make_trial(start_lateness_s=0.001)
    assert StartTiming(limit_s=0.0005).judge(trial, make_context(), {}).verdict.void
    assert StartTiming(limit_s=1.0, limit_periods=0.5).judge(trial, make_context(), {}).verdict.void
    assert not StartTiming(limit_s=1.0).judge(trial, make_context(), {}).verdict.void
