"""Health: slow changes of rig and line, told once with number and limit."""

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from trialrunner.core.guards.health import Health
from trialrunner.core.trial import GuardResult, Level, Trial, Verdict

Make = Callable[..., Any]


@pytest.fixture
def judge_trials(make_trial: Make, make_context: Make) -> Callable[..., list[Verdict]]:
    """Verdicts on so many trials; `change` makes the fields of trial k."""

    def run(n: int, change: Callable[[int], dict[str, Any]], **guard: Any) -> list[Verdict]:
        memory: Any = {}
        verdicts = []
        for k in range(n):
            trial: Trial = make_trial(seed=k, index=k, feedforward=np.full((400, 1), 0.001 * k))
            trial = replace(trial, **change(k))
            context = make_context(auxiliary=("motor_temperature",))
            result: GuardResult = Health(**guard).judge(trial, context, memory)
            memory = result.memory
            verdicts.append(result.verdict)
        return verdicts

    return run


def complaints(verdicts: list[Verdict]) -> list[int]:
    return [k for k, verdict in enumerate(verdicts) if verdict.level]


def test_healthy_trials_are_silent(judge_trials: Any) -> None:
    assert complaints(judge_trials(200, lambda k: {})) == []


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda k: {"start_state": np.array([0.002 * k])}, "output x starts"),
        (lambda k: {"asked_again": k // 2}, "asked for again"),
        (lambda k: {"start_lateness_s": 0.00003 * k}, "sample periods off"),
    ],
    ids=["start", "dropout", "late"],
)
def test_a_slow_change_is_told_once(judge_trials: Any, change: Any, words: str) -> None:
    """It rises through 90 trials: one warning, with number and limit."""
    verdicts = judge_trials(90, change)
    found = complaints(verdicts)
    assert len(found) == 1
    said = verdicts[found[0]]
    assert said.level is Level.WARN
    assert words in said.reason
    assert said.value > said.limit
    assert f"{said.limit:.3g}" in said.reason


def test_it_is_told_again_after_it_was_gone(judge_trials: Any) -> None:
    """Hysteresis: hovering about the limit gives one warning, going and coming back two."""

    def comes_and_goes(k: int) -> dict[str, Any]:
        return {"asked_again": 40 if k % 100 < 50 else 0}

    assert len(complaints(judge_trials(150, comes_and_goes))) == 2


def test_one_bad_trial_is_no_trend(judge_trials: Any) -> None:
    assert complaints(judge_trials(40, lambda k: {"asked_again": 100 if k == 20 else 0})) == []


def test_an_auxiliary_channel_above_its_limit_halts(judge_trials: Any) -> None:
    """At the limit is not above it; the reason names channel, reading and limit."""

    def heats(k: int) -> dict[str, Any]:
        return {"auxiliary": np.full((400, 1), 60.0 + k)}

    verdicts = judge_trials(25, heats, auxiliary_high={"motor_temperature": 80.0})
    assert complaints(verdicts) == [21, 22, 23, 24]
    assert verdicts[21].level is Level.HALT
    assert verdicts[21].reason == "motor_temperature reads 81, above its limit 80"
    low = judge_trials(3, heats, auxiliary_low={"motor_temperature": 61.0})
    assert complaints(low) == [0]
    assert "below" in low[0].reason


def test_a_limit_on_a_channel_that_the_rig_does_not_have_is_told(judge_trials: Any) -> None:
    """A misspelt name must not pass for a watched temperature."""
    said = judge_trials(1, lambda k: {}, auxiliary_high={"motor_temprature": 80.0})[0]
    assert said.level is Level.HALT
    assert "motor_temprature" in said.reason
    assert "motor_temperature" in said.reason


def test_another_answer_to_the_same_feedforward_is_told(
    judge_trials: Any, make_trial: Make
) -> None:
    """Repeats whose output shrinks by 1 % a trial: friction or gain has changed. With a new
    feedforward at each trial the same is learning."""
    output = make_trial().output
    same = np.full((400, 1), 0.5)

    def repeats(k: int) -> dict[str, Any]:
        return {"feedforward": same, "output": output * 0.99**k}

    verdicts = judge_trials(10, repeats)
    assert complaints(verdicts) == [6], "0.99^6 is the first below 0.95"
    assert "same feedforward" in verdicts[6].reason
    assert complaints(judge_trials(10, lambda k: {"output": output * 0.99**k})) == []


def test_a_sensor_coarser_than_the_error_is_told_once(judge_trials: Any, move: Any) -> None:
    """The error is a fourth of the sensor's step: there is nothing left to learn from it."""
    coarse = np.round(move)
    reference = coarse + 0.25
    verdicts = judge_trials(5, lambda k: {"output": coarse, "reference": reference})
    assert complaints(verdicts) == [0]
    assert "steps of 1 mm" in verdicts[0].reason
