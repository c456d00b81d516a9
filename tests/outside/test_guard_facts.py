"""Guards against facts from outside the project; the source stands beside each check."""

import math
from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from scipy import stats

from trialrunner.core.guards import GuardContext, rose
from trialrunner.core.guards.divergence import Divergence
from trialrunner.core.guards.error_growth import ErrorGrowth
from trialrunner.core.guards.readings import find_spike
from trialrunner.core.scatter import MAD_TO_SIGMA
from trialrunner.core.settings import InputChannel, OutputChannel
from trialrunner.core.trial import Level, Purpose, Trial, Verdict


def test_mad_to_sigma_is_that_of_the_normal_distribution() -> None:
    """Source: scipy.stats, quantile 0.75 of the normal law; 1.4826 is the customary rounding."""
    assert pytest.approx(1.0 / stats.norm.ppf(0.75), abs=5e-5) == MAD_TO_SIGMA
    sample = np.random.default_rng(0).standard_normal(1000)
    ours = MAD_TO_SIGMA * float(np.median(np.abs(sample - np.median(sample))))
    assert ours == pytest.approx(stats.median_abs_deviation(sample, scale="normal"), rel=1e-4)


def test_spike_threshold_follows_the_noise_of_second_differences() -> None:
    """Source: variance of a weighted sum; weights 1, -2, 1 give 6 times that of white noise.

    So with the factor 10 a spike must exceed about 10 sqrt(6) = 24.5 standard deviations.
    """
    noise = np.random.default_rng(1).standard_normal(20_000)
    limits = []
    for height, found in ((18.0, False), (32.0, True)):
        y = noise.copy()
        y[7_000] = height
        peak = find_spike(y, 10.0)
        assert (peak is not None) is found
        limits += [] if peak is None else [peak.limit]
    assert limits[0] == pytest.approx(10.0 * math.sqrt(6.0), rel=0.5)


@pytest.mark.parametrize("times", [2, 3, 4])
def test_the_chance_of_a_row_of_rises(times: int) -> None:
    """Source: combinatorics; n + 1 values in random order rise throughout once in (n + 1)!."""
    values = np.random.default_rng(2).random((20_000, times + 1)).tolist()
    share = np.mean([rose(row, times) for row in values])
    expected = 1.0 / math.factorial(times + 1)
    assert share == pytest.approx(expected, abs=4.0 * math.sqrt(expected / 20_000))


def judge_series(norms: list[float], guard: Any) -> list[Verdict]:
    """Verdicts on the trials of a run that ignores them."""
    trial = Trial(
        index=0,
        purpose=Purpose.LEARN,
        feedforward=np.zeros((2, 1)),
        reference=np.zeros((2, 1)),
        output=np.zeros((2, 1)),
        auxiliary=np.zeros((2, 0)),
        limited=np.zeros((2, 1), dtype=bool),
        start_state=np.zeros(1),
    )
    memory: Any = {}
    verdicts = []
    for k, norm in enumerate(norms):
        context = GuardContext(
            period_s=0.01,
            inputs=(InputChannel(name="u", unit="V", low=-1.0, high=1.0),),
            outputs=(OutputChannel(name="y", unit="mm", low=-1.0, high=1.0),),
            clipped=np.zeros((2, 1), dtype=bool),
            error_norm=norm,
            first_norm=norms[0] if k else math.nan,
            best_norm=min(norms[:k], default=math.inf),
            best_trial=-1,
            recent_norms=tuple(norms[:k]),
            learning=True,
            limits_rising=False,
        )
        result = guard.judge(trial, context, memory)
        memory = result.memory
        verdicts.append(result.verdict)
    return verdicts


def first_alarm(norms: list[float], guard: Any) -> int | None:
    levels = [verdict.level for verdict in judge_series(norms, guard)]
    return next((k for k, level in enumerate(levels) if level), None)


def iterate(plant: np.ndarray, law: np.ndarray, error: np.ndarray, trials: int) -> list[float]:
    """Error norms of e' = (I - G L) e."""
    norms = []
    for _ in range(trials):
        norms.append(float(np.linalg.norm(error)))
        error = error - plant @ (law @ error)
    return norms


def toeplitz(markov: np.ndarray) -> np.ndarray:
    n = len(markov)
    rows, columns = np.indices((n, n))
    return np.where(rows >= columns, markov[np.abs(rows - columns)], 0.0)


def test_the_known_bad_transient_is_stopped_at_its_second_trial() -> None:
    """A law whose every eigenvalue is 0.5 and whose error grows 1e11 times before it dies.

    Source: the example of Bristow, Tharayil and Alleyne 2006, from memory; p_k = k 0.9^(k-1), law
    0.5 e, N = 50. The norms for a unit step, 7.071, 246.3, 7221, were recomputed apart from this
    project's code.
    """
    k = np.arange(1, 51)
    norms = iterate(toeplitz(k * 0.9 ** (k - 1)), 0.5 * np.eye(50), np.ones(50), 6)
    assert norms[:3] == [pytest.approx(v, rel=1e-3) for v in (7.071, 246.3, 7221)]
    assert first_alarm(norms, Divergence()) == 1
    assert judge_series(norms, Divergence())[1].level is Level.HALT
    assert first_alarm(norms, ErrorGrowth()) == 3, "it warms up for three trials"


@pytest.mark.parametrize("gain", [0.05, 0.5, 1.0, 1.5, 1.95])
def test_an_inverse_law_within_its_gain_limit_is_left_alone(gain: float) -> None:
    """Source: common practice, no source; the inverse law converges for 0 < gain < 2."""
    plant = toeplitz(0.5 ** np.arange(30))
    norms = iterate(plant, gain * np.linalg.inv(plant), np.ones(30), 40)
    assert all(later <= earlier for earlier, later in pairwise(norms))
    assert first_alarm(norms, ErrorGrowth()) is None
    assert first_alarm(norms, Divergence()) is None


@pytest.mark.parametrize("gain", [2.1, 2.3, 2.6, 4.0])
def test_an_inverse_law_beyond_its_gain_limit_is_caught(gain: float) -> None:
    """Source: common practice, no source; beyond 2 the error grows by gain - 1 in each trial."""
    plant = toeplitz(0.5 ** np.arange(30))
    norms = iterate(plant, gain * np.linalg.inv(plant), np.ones(30), 40)
    assert norms[1] / norms[0] == pytest.approx(gain - 1.0)
    growth = first_alarm(norms, ErrorGrowth())
    hard = first_alarm(norms, Divergence())
    assert growth is not None
    assert hard is not None
    assert (growth < hard) is (gain < 3.0), "slow growth is seen long before the hard limit"
    assert norms[min(growth, hard)] <= 5.0 * (gain - 1.0) * norms[0]


@pytest.mark.parametrize("gain", [0.1, 0.5, 1.0, 1.5])
def test_the_noise_that_learning_adds_is_no_growth(gain: float) -> None:
    """Noise that differs from trial to trial is amplified at the floor, and stays so.

    Source: Norrlof and Gunnarsson, from memory: with exact inversion the variance of
    the error is 2 / (2 - gain) times that of the noise.
    """
    rng = np.random.default_rng(3)
    e_repeating = np.full(500, 10.0)
    norms = []
    for _ in range(200):
        error = e_repeating + rng.standard_normal(500)
        e_repeating = e_repeating - gain * error
        norms.append(float(np.sqrt(np.mean(error**2))))
    assert np.mean(np.square(norms[50:])) == pytest.approx(2.0 / (2.0 - gain), rel=0.05)
    assert first_alarm(norms, ErrorGrowth()) is None
