"""Bands: growth at some frequencies while the whole error still looks fine."""

import math
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from trialrunner.core.bands import LEAST_COSINES, band_levels, octave_edges_hz
from trialrunner.core.guards.bands import Bands, prevention_hz
from trialrunner.core.norms import error_norm
from trialrunner.core.trial import Array, GuardResult, Level, Purpose, Trial, Verdict

Make = Callable[..., Any]
N, PERIOD_S = 400, 0.001


def tone(hz: float, size: float) -> Array:
    """(N, 1): a cosine of that amplitude."""
    return np.asarray(size * np.cos(2 * np.pi * hz * PERIOD_S * (np.arange(N) + 0.5)))[:, None]


@pytest.fixture
def judge_tones(make_trial: Make, make_context: Make) -> Callable[..., list[Verdict]]:
    """Verdicts on healthy trials to whose output and feedforward a tone is added by trial."""

    def run(
        hz: float, sizes: list[float], pushes: list[float], guard: Bands | None = None
    ) -> list[Verdict]:
        memory: Any = {}
        verdicts = []
        for k, (size, push) in enumerate(zip(sizes, pushes, strict=True)):
            trial: Trial = make_trial(seed=k, index=k, feedforward=tone(hz, push) + tone(5.0, 1.0))
            trial = replace(trial, output=trial.output + tone(hz, size))
            result: GuardResult = (guard or Bands()).judge(trial, make_context(n_charts=3), memory)
            memory = result.memory
            verdicts.append(result.verdict)
        return verdicts

    return run


def alarms(verdicts: list[Verdict]) -> list[int]:
    return [k for k, verdict in enumerate(verdicts) if verdict.level]


@pytest.mark.parametrize("n_samples", [1, 2, 7, 16, 17, 100, 400, 1001, 20000])
def test_the_bands_together_are_the_whole(n_samples: int) -> None:
    """The squares of the bands add up to the square of the error norm, whatever the length."""
    rng = np.random.default_rng(n_samples)
    error, scales = rng.standard_normal((n_samples, 2)), np.array([1.0, 0.1])
    levels = band_levels(error, scales, PERIOD_S)
    assert len(levels) == len(octave_edges_hz(n_samples, PERIOD_S)) - 1
    assert math.sqrt(float(np.sum(levels**2))) == pytest.approx(error_norm(error, scales))


def test_the_bands_are_octaves_up_to_nyquist() -> None:
    """And none above the lowest holds fewer cosines than make a steady number."""
    edges = octave_edges_hz(N, PERIOD_S)
    assert edges == (0.0, 15.625, 31.25, 62.5, 125.0, 250.0, 500.0)
    assert edges[1] * 2 * N * PERIOD_S >= LEAST_COSINES


def test_a_tone_lies_in_its_band() -> None:
    levels = band_levels(tone(100.0, 1.0), np.ones(1), PERIOD_S)
    assert int(np.argmax(levels)) == 3
    assert levels[3] == pytest.approx(math.sqrt(0.5), rel=1e-3)


def test_learning_that_diverges_at_high_frequency_freezes_early(judge_tones: Any) -> None:
    """A tone that grows by 15 % a trial in feedforward and error is found while it is still under a
    tenth of the error norm; the reason names the band, the number, the limit and the bandwidth."""
    sizes = [0.0005 * 1.15**k for k in range(50)]
    verdicts = judge_tones(90.0, sizes, sizes)
    first = alarms(verdicts)[0]
    assert sizes[first] / math.sqrt(2) < 0.1 * 0.3, "the norm of the trials is about 0.3"
    said = verdicts[first]
    assert said.level is Level.FREEZE
    assert said.value > said.limit > Bands().growth
    for part in (
        "62.5 and 125 Hz",
        f"the limit is {said.limit:.3g} times",
        "Q-filter bandwidth of at most 62.5 Hz",
    ):
        assert part in said.reason


def test_a_new_vibration_that_learning_did_not_make_is_a_warning(judge_tones: Any) -> None:
    """The feedforward there is what it was: a person should look at the rig."""
    verdicts = judge_tones(200.0, [0.0] * 25 + [0.05] * 10, [0.01] * 35)
    first = alarms(verdicts)[0]
    assert 25 <= first < 29
    assert verdicts[first].level is Level.WARN
    assert "look at the rig" in verdicts[first].reason


def test_healthy_trials_are_silent(judge_tones: Any) -> None:
    """A thousand trials of noise and a converging error."""
    sizes = [0.5 * math.exp(-k / 4) for k in range(1000)]
    assert alarms(judge_tones(3.0, sizes, [1.0 - size for size in sizes])) == []


def test_a_single_odd_trial_is_silent(judge_tones: Any) -> None:
    sizes = [0.0] * 30
    sizes[20] = 0.05
    assert alarms(judge_tones(90.0, sizes, [0.0] * 30)) == []


def test_it_waits_for_its_warm_up_and_for_learning_trials(
    judge_tones: Any, make_trial: Make, make_context: Make
) -> None:
    """Growth before enough trials is early learning; a probe changes nothing of what it knows."""
    sizes = [0.0] * 3 + [0.05] * 8
    assert alarms(judge_tones(90.0, sizes, sizes)) == []
    memory = Bands().judge(make_trial(), make_context(), {}).memory
    probe = make_trial(purpose=Purpose.PROBE, output=np.full((N, 1), 30.0))
    assert Bands().judge(probe, make_context(), memory).memory == memory


def test_the_lowest_band_advises_a_smaller_gain(judge_tones: Any) -> None:
    """No Q-filter helps where the reference itself lives."""
    sizes = [0.3] * 20 + [2.0] * 10
    verdicts = judge_tones(5.0, sizes, [0.5] * 20 + [6.0] * 10)
    assert "reduce the law's gain" in verdicts[alarms(verdicts)[0]].reason


def test_the_advised_bandwidth_falls_with_fast_growth() -> None:
    """Slow growth: the band's lower edge. Doubling each trial: |Q| = 1/2 at that edge, that is
    2^(-(f/b)^2/2) = 1/2 with b = f / sqrt(2)."""
    assert prevention_hz(100.0, 2.0, 20) == 100.0
    assert prevention_hz(100.0, 2.0**10, 20) == pytest.approx(100.0 / math.sqrt(2.0))


def test_a_silent_channel_is_no_growth(make_trial: Make, make_context: Make) -> None:
    """Error and feedforward of exactly zero, then of rounding size, are handled."""
    memory: Any = {}
    for _ in range(20):
        trial = make_trial(feedforward=np.zeros((N, 1)))
        trial = replace(trial, output=trial.reference.copy())
        result = Bands().judge(trial, make_context(), memory)
        memory = result.memory
        assert result.verdict.level is Level.PASS
