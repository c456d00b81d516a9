"""Model laws against published or independently computed numbers and general-purpose libraries."""

import control
import numpy as np
import pytest
from scipy.signal import freqz

from trialrunner.core.laws import LawContext
from trialrunner.core.laws.gradient import GradientSettings
from trialrunner.core.laws.inverse import InverseSettings
from trialrunner.core.laws.norm_optimal import NormOptimalSettings
from trialrunner.core.lifted import Lifted, norm
from trialrunner.core.plant_model import StateSpaceSettings, TransferFunctionSettings
from trialrunner.core.trial import Purpose, Trial


def make_plant(numerator, denominator):
    model = TransferFunctionSettings(
        period_s=1.0, numerator=((tuple(numerator),),), denominator=((tuple(denominator),),)
    )
    return model.build()


def make_law(settings, plant, n):
    limits = np.full(1, np.inf)
    return settings.build(
        LawContext(1.0, n, 1, 1, np.zeros((n, 1)), -limits, limits, limits, plant)
    )


def run(law, plant, reference, n_trials):
    """Errors (n_trials + 1, n) and the last feedforward, learning from zero."""
    lifted, n = Lifted(plant.impulse_response(len(reference))), len(reference)
    u, errors = np.zeros((n, 1)), []
    for index in range(n_trials + 1):
        e = reference[:, None] - lifted.apply(u)
        errors.append(e[:, 0])
        if index < n_trials:
            limited, auxiliary = np.zeros((n, 1), dtype=bool), np.zeros((n, 0))
            trial = Trial(
                index, Purpose.LEARN, u, e, np.zeros((n, 1)), auxiliary, limited, np.zeros(1)
            )
            u = law.update(trial, 1.0, {}, {}).feedforward
    return np.array(errors), u[:, 0]


def test_markov_parameters_of_the_warning_example():
    """p = 1, 1.8, 2.43, 2.916 (Bristow, Tharayil and Alleyne 2006, from memory; W1)."""
    plant = make_plant((1.0,), (1.0, -1.8, 0.81))
    assert np.allclose(plant.impulse_response(4)[:, 0, 0], (1.0, 1.8, 2.43, 2.916))


def test_the_warning_example_grows_by_orders_of_magnitude_before_it_converges():
    """I - G/2 at N = 50 has norm 38.32; a unit step's error: 7.071, 246.3, 7221, peak 8.54e11 at
    trial 13, below the start again at trial 122 (W1, recomputed independently for this project)."""
    lifted = Lifted(make_plant((1.0,), (1.0, -1.8, 0.81)).impulse_response(50))
    contraction = np.eye(50) - 0.5 * np.column_stack(
        [lifted.apply(column[:, None])[:, 0] for column in np.eye(50)]
    )
    assert np.linalg.norm(contraction, 2) == pytest.approx(38.32, abs=0.005)
    error, norms = np.ones(50), []
    for _ in range(123):
        norms.append(np.linalg.norm(error))
        error = contraction @ error
    assert np.allclose(norms[:3], (7.071, 246.3, 7221.0), rtol=5e-4)
    assert np.argmax(norms) == 13
    assert norms[13] == pytest.approx(8.54e11, rel=1e-3)


def test_norm_optimal_worked_numbers():
    """G = [[1, 0], [1.8, 1]], r = (1, 1), weights 1, 0.1, 0.5: u1 = (.595027, -.044405),
    u = (.834420, -.456323) in the limit (W2, recomputed independently for this project)."""
    plant = make_plant((1.0,), (1.0, -1.8, 0.81))
    law = make_law(NormOptimalSettings(input_weight=0.1, step_weight=0.5), plant, 2)
    assert np.allclose(run(law, plant, np.ones(2), 1)[1], (0.595027, -0.044405), atol=6e-7)
    assert np.allclose(run(law, plant, np.ones(2), 80)[1], (0.834420, -0.456323), atol=6e-7)


def test_gradient_limit_worked_number():
    """The largest gain for the same G is 2 / ||G||^2 = .396695 (W2)."""
    lifted = Lifted(make_plant((1.0,), (1.0, -1.8, 0.81)).impulse_response(2))
    assert 2.0 / norm(lifted, tolerance=1e-12) ** 2 == pytest.approx(0.396695, abs=6e-7)


@pytest.mark.parametrize(("gain", "expected"), [(0.5, 0.6666), (1.2, 1.3942)])
def test_contraction_worked_numbers(gain, expected):
    """p_k = .5^(k-1), N = 50: norms of I - gain G (W3, recomputed for this project)."""
    lifted = Lifted(make_plant((1.0,), (1.0, -0.5)).impulse_response(50))
    g = np.column_stack([lifted.apply(column[:, None])[:, 0] for column in np.eye(50)])
    assert np.linalg.norm(np.eye(50) - gain * g, 2) == pytest.approx(expected, abs=6e-5)


@pytest.mark.parametrize(("gain", "factor"), [(0.1, 1.0526), (0.5, 1.3333), (1.0, 2.0), (1.5, 4.0)])
def test_an_inverse_amplifies_noise_from_trial_to_trial_by_the_known_factor(gain, factor):
    """var(e) = 2 / (2 - gain) var(v) for an exact inverse (Norrlof and Gunnarsson, from memory;
    W5). The plant is a pure gain, so that the inverse is exact at any frequency."""
    plant, n = make_plant((2.0,), (1.0,)), 4000
    law = make_law(InverseSettings(learning_gain=gain, regularisation=0.0), plant, n)
    rng, u, tail = np.random.default_rng(7), np.zeros((n, 1)), []
    for index in range(130):
        e = -2.0 * u - rng.normal(size=(n, 1))
        if index >= 100:
            tail.append(np.var(e))
        limited, auxiliary = np.zeros((n, 1), dtype=bool), np.zeros((n, 0))
        trial = Trial(index, Purpose.LEARN, u, e, np.zeros((n, 1)), auxiliary, limited, np.zeros(1))
        u = law.update(trial, 1.0, {}, {}).feedforward
    assert np.mean(tail) == pytest.approx(factor, rel=0.03)


@pytest.mark.parametrize(("gain", "ratio"), [(0.5, 0.5), (1.0, 0.0), (1.5, -0.5), (1.9, -0.9)])
def test_an_inverse_leaves_one_minus_the_gain_of_the_error(gain, ratio):
    """e' = (1 - gain) e, convergent for gains below 2 (common practice, no source)."""
    plant, r = make_plant((2.0,), (1.0,)), np.random.default_rng(8).normal(size=64)
    law = make_law(InverseSettings(learning_gain=gain, regularisation=0.0), plant, 64)
    errors, _ = run(law, plant, r, 2)
    assert np.allclose(errors[1], ratio * errors[0], atol=1e-12)


def test_gradient_converges_just_below_its_limit_and_grows_just_above():
    """0 < gain < 2 / ||G||^2 (common practice, no source)."""
    plant, n = make_plant((0.0, 1.0), (1.0, -0.5)), 30
    lifted = Lifted(plant.impulse_response(n))
    g = np.column_stack([lifted.apply(column[:, None])[:, 0] for column in np.eye(n)])
    worst = np.linalg.svd(g)[0][:, 0]
    law = make_law(GradientSettings(step=0.98), plant, n)
    errors, _ = run(law, plant, worst, 1)
    assert np.linalg.norm(errors[1]) < np.linalg.norm(errors[0])
    law.factor *= 1.05
    errors, _ = run(law, plant, worst, 1)
    assert np.linalg.norm(errors[1]) > np.linalg.norm(errors[0])


def test_responses_equal_scipy_for_a_transfer_function():
    b, a, n_fft = (0.0, 0.3, -0.1), (1.0, -1.5, 0.7), 128
    _, expected = freqz(b, a, worN=2 * np.pi * np.arange(65) / n_fft)
    assert np.allclose(make_plant(b, a).response(n_fft)[:, 0, 0], expected)


def test_responses_equal_python_control_for_two_inputs_and_outputs():
    a, b = ((0.5, 0.2), (-0.1, 0.7)), ((1.0, 0.0), (0.3, 2.0))
    c, d = ((1.0, -1.0), (0.0, 1.0)), ((0.0, 0.1), (0.0, 0.0))
    found = StateSpaceSettings(period_s=0.1, a=a, b=b, c=c, d=d).build().response(64)
    omega = 2 * np.pi * np.arange(33) / 64 / 0.1
    expected = control.ss(a, b, c, d, 0.1)(np.exp(1j * omega * 0.1))
    assert np.allclose(found, np.moveaxis(expected, 2, 0))
