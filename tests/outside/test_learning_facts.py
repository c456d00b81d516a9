"""What is known of simple learning laws, tried with the real learner on models in the lifted form.

Trial j: e = r - G u, G lower triangular Toeplitz of Markov parameters. Sources beside each check;
"common practice" facts have none.
"""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from scipy.linalg import solve_triangular, toeplitz

from trialrunner.core.laws import LawContext, Step
from trialrunner.core.laws.pd import PdSettings
from trialrunner.core.learning import Learner
from trialrunner.core.run_state import Carry, RunState
from trialrunner.core.settings import (
    FilterSettings,
    Horizon,
    InputChannel,
    LearnSettings,
    OutputChannel,
    RunSettings,
)
from trialrunner.core.trial import Array, Memory, Purpose, Trial

PERIOD_S = 0.01


@dataclass(frozen=True)
class InverseLaw:
    """u' = u + g G^-1 e with a perfect model; a law of this test, not of the project."""

    model: Array
    g: float
    kind: str = "inverse"

    def build(self, context: LawContext) -> "InverseLaw":
        return self

    def update(
        self, trial: Trial, gain: float, memory: Memory, arrays: Mapping[str, Array]
    ) -> Step:
        return Step(
            trial.feedforward + self.g * solve_triangular(self.model, trial.error, lower=True)
        )


def lifted(markov: Array) -> Array:
    return np.asarray(toeplitz(markov, np.zeros(len(markov))))


def first_order(n_samples: int, delay: int = 0, pole: float = 0.9) -> Array:
    """Markov parameters of a first-order plant of gain 1."""
    markov = (1.0 - pole) * pole ** np.arange(n_samples)
    return np.concatenate((np.zeros(delay), markov))[:n_samples]


def smooth_reference(n_samples: int) -> Array:
    """Rest, a smooth rise to 1, rest."""
    x = np.clip((np.arange(n_samples) / n_samples - 0.2) / 0.5, 0.0, 1.0)
    return np.asarray(x**3 * (10.0 - 15.0 * x + 6.0 * x**2))


def run(
    plant: Array,
    reference: Array,
    law: Any,
    n_trials: int,
    noise: Array | None = None,
    q_filter: FilterSettings | None = None,
    **learn: Any,
) -> Array:
    """Errors of the trials, (n_trials + 1, n_samples), starting from zero feedforward."""
    n_samples = len(reference)
    no_limit = np.array([np.inf])
    chosen = RunSettings(
        horizon=Horizon(n_samples=n_samples, period_s=PERIOD_S),
        inputs=(
            InputChannel(
                name="u", unit="1", low=-np.inf, high=np.inf, pin_start=False, pin_end=False
            ),
        ),
        outputs=(OutputChannel(name="y", unit="1", low=-np.inf, high=np.inf),),
        law=law,
        filter=q_filter or FilterSettings(shape="none"),
        learn=LearnSettings(**learn),
    )
    context = LawContext(
        PERIOD_S, n_samples, 1, 1, reference[:, None], -no_limit, no_limit, no_limit
    )
    learner = Learner(chosen, context, "f8")
    first = learner.first_feedforward().feedforward
    carry = replace(Carry.zeros(n_samples, 1, 1), feedforward=first, learned=first)
    state, errors = RunState(), []
    for trial_index in range(n_trials + 1):
        disturbance = 0.0 if noise is None else noise[trial_index]
        output = plant @ carry.feedforward[:, 0] + disturbance
        trial = Trial(
            index=trial_index,
            purpose=Purpose.LEARN,
            feedforward=carry.feedforward,
            reference=reference[:, None],
            output=output[:, None],
            auxiliary=np.zeros((n_samples, 0)),
            limited=np.zeros((n_samples, 1), dtype=bool),
            start_state=np.zeros(1),
        )
        errors.append(trial.error[:, 0])
        learned = learner.learn(trial, state, carry)
        carry = learned.carry
        state = replace(state, averaged=learned.averaged, updates=state.updates + learned.updated)
    return np.array(errors)


def norms(errors: Array) -> Array:
    return np.asarray(np.linalg.norm(errors, axis=1))


def test_a_proportional_law_suits_a_first_order_response() -> None:
    """Common practice, no source: the error falls at every trial, and by far."""
    fallen = norms(
        run(lifted(first_order(200)), smooth_reference(200), PdSettings(proportional=1.0), 60)
    )
    assert np.all(np.diff(fallen) <= 0.0)
    assert fallen[-1] < 1e-3 * fallen[0]


def test_a_lead_of_the_delay_makes_up_for_it() -> None:
    """Common practice, no source (the lead law is Longman's, Int. J. Control 73, 2000): with 15
    samples of delay a P law without lead grows, with a lead of 15 it learns."""
    plant, reference = lifted(first_order(200, delay=15)), smooth_reference(200)
    without = norms(run(plant, reference, PdSettings(proportional=0.8), 40))
    led = norms(run(plant, reference, PdSettings(proportional=0.8, lead_samples=15), 40))
    assert without[-1] > 10.0 * without[0]
    assert led[-1] < 1e-3 * led[0]


def test_derivative_action_adds_the_phase_that_a_second_order_response_lacks() -> None:
    """Common practice, no source: on a resonant second-order plant a P law grows in the end where
    a PD law of the same proportional gain, behind the same Q-filter, learns."""
    k, damping, w = np.arange(400), 0.3, 0.15
    impulse = np.exp(-damping * w * k) * np.sin(w * np.sqrt(1 - damping**2) * k)
    plant = lifted(impulse / impulse.sum())
    reference, q_filter = smooth_reference(400), FilterSettings(bandwidth_hz=6.0)
    p_law = PdSettings(proportional=0.6)
    pd_law = PdSettings(proportional=0.6, derivative=0.05)
    p_norms = norms(run(plant, reference, p_law, 40, q_filter=q_filter))
    pd_norms = norms(run(plant, reference, pd_law, 40, q_filter=q_filter))
    assert p_norms[-1] > 5.0 * p_norms[0]
    assert pd_norms[-1] < 0.002 * pd_norms[0]


@pytest.mark.parametrize("g", [0.2, 0.5, 1.0, 1.5, 1.9])
def test_an_inverse_law_shrinks_the_error_by_one_minus_its_gain(g: float) -> None:
    """Common practice, no source: e' = (1 - g) e for 0 < g < 2, one trial for g = 1."""
    plant = lifted(first_order(100))
    errors = run(plant, smooth_reference(100), InverseLaw(plant, g), 5)
    for before, after in pairwise(errors):
        assert np.allclose(after, (1.0 - g) * before, rtol=0, atol=1e-12)


@pytest.mark.parametrize("g", [-0.1, 2.1])
def test_an_inverse_law_with_a_gain_outside_zero_to_two_grows(g: float) -> None:
    """Common practice, no source."""
    plant = lifted(first_order(100))
    grown = norms(run(plant, smooth_reference(100), InverseLaw(plant, g), 10))
    assert np.all(np.diff(grown) > 0.0)


@pytest.mark.parametrize(("gamma", "expected"), [(0.5, 0.6666), (1.2, 1.3942)])
def test_the_error_map_of_a_p_law_has_the_known_norm(gamma: float, expected: float) -> None:
    """p_k = 0.5^(k-1), N = 50: largest singular value of I - gamma G; recomputed in numpy for this
    project's field notes (W3). The map is measured: one trial for each unit error."""
    plant = lifted(0.5 ** np.arange(50.0))
    law = PdSettings(proportional=gamma)
    error_map = np.array([run(plant, unit, law, 1)[1] for unit in np.eye(50)]).T
    assert np.allclose(error_map, np.eye(50) - gamma * plant, rtol=0, atol=1e-12)
    assert np.linalg.norm(error_map, 2) == pytest.approx(expected, abs=5e-5)


def test_a_stable_law_may_grow_enormously_before_it_dies() -> None:
    """The warning of Bristow, Tharayil and Alleyne, IEEE Control Systems Magazine 26(3), 2006
    (example from memory, figures recomputed, W1): G = q/(q - 0.9)^2, law 0.5 e, N = 50, unit step.
    Every eigenvalue is 0.5; the error peaks at trial 13 and is below its start at trial 122."""
    k = np.arange(50)
    found = norms(run(lifted((k + 1) * 0.9**k), np.ones(50), PdSettings(proportional=0.5), 125))
    assert found[:3] == pytest.approx([7.071, 246.3, 7221.0], rel=1e-3)
    assert int(np.argmax(found)) == 13
    assert found[13] == pytest.approx(8.54e11, rel=1e-3)
    assert int(np.flatnonzero(found[1:] < found[0])[0]) + 1 == 122


def test_the_q_filter_leaves_the_error_that_it_forbids_to_learn() -> None:
    """e = (1 - Q) / (1 - Q (1 - L G)) d: Q = 0.9 and L G = 0.5 leave 0.181818 (formula from the
    survey of 2006, from memory; number recomputed, W4). The reference is a cosine on which the
    Gaussian's magnitude is 0.9."""
    n_samples, number = 256, 12
    frequency_hz = number / (2 * n_samples * PERIOD_S)
    bandwidth_hz = frequency_hz * np.sqrt(-0.5 / np.log2(0.9))
    reference = np.cos(np.pi * number * (np.arange(n_samples) + 0.5) / n_samples)
    q_filter = FilterSettings(shape="gaussian", bandwidth_hz=float(bandwidth_hz))
    law = PdSettings(proportional=0.5)
    errors = run(np.eye(n_samples), reference, law, 80, q_filter=q_filter)
    assert np.allclose(errors[-1], 0.181818 * reference, rtol=0, atol=1e-6)


def test_forgetting_leaves_its_share_of_the_error() -> None:
    """e = alpha / (alpha + L G) d: alpha = 0.01 and L G = 0.5 leave 0.019608 (W4, recomputed)."""
    reference = smooth_reference(64)
    errors = run(np.eye(64), reference, PdSettings(proportional=0.5), 80, forgetting=0.01)
    assert np.allclose(errors[-1], 0.019608 * reference, rtol=0, atol=1e-6)


@pytest.mark.parametrize(
    ("gamma", "factor"), [(0.1, 1.0526), (0.5, 1.3333), (1.0, 2.0), (1.5, 4.0)]
)
def test_noise_that_does_not_repeat_is_amplified_by_the_known_factor(
    gamma: float, factor: float
) -> None:
    """var(e) = 2 / (2 - gamma) var(v) for exact inversion without Q (Norrlof and Gunnarsson, from
    memory; W5). 2,000 samples of white noise over 120 trials after settling: within 2 %."""
    noise = np.random.default_rng(11).normal(size=(201, 2000))
    errors = run(np.eye(2000), np.zeros(2000), PdSettings(proportional=gamma), 200, noise)
    assert np.var(errors[80:]) == pytest.approx(factor, rel=0.02)


def test_averaging_trials_lowers_the_noise_that_is_learned() -> None:
    """Common practice, no source: the mean of P trials has a P-th of the variance, so with gain 1
    the error's variance falls from 2 to 1 + 1/P."""
    noise = np.random.default_rng(12).normal(size=(241, 1000))
    law = PdSettings(proportional=1.0)
    errors = run(np.eye(1000), np.zeros(1000), law, 240, noise, average_trials=4)
    assert np.var(errors[40:]) == pytest.approx(1.25, rel=0.02)
