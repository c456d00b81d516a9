"""Laws with a plant model: dense oracles at small horizons and their defining properties."""

import numpy as np
import pytest

from trialrunner.core.errors import SettingError
from trialrunner.core.laws import LawContext
from trialrunner.core.laws.gradient import GradientSettings
from trialrunner.core.laws.inverse import InverseSettings, regularised_inverse
from trialrunner.core.lifted import Lifted, norm
from trialrunner.core.plant_model import (
    ImpulseResponseSettings,
    PlantModel,
    StateSpace,
    StateSpaceSettings,
    TransferFunctionSettings,
    build_plant,
)
from trialrunner.core.trial import Purpose, Trial


def make_plant(n_inputs, n_outputs, order=4, seed=0):
    """A stable random state-space model with delay 1."""
    rng = np.random.default_rng(seed)
    a = rng.normal(size=(order, order))
    a *= 0.8 / np.max(np.abs(np.linalg.eigvals(a)))
    b, c = rng.normal(size=(order, n_inputs)), rng.normal(size=(n_outputs, order))
    return PlantModel(n_inputs, n_outputs, StateSpace(a, b, c, np.zeros((n_outputs, n_inputs))))


def dense(plant, n):
    """G by its definition: rows and columns sample by sample."""
    h = plant.impulse_response(n)
    g = np.zeros((n, plant.n_outputs, n, plant.n_inputs))
    for row in range(n):
        for column in range(row + 1):
            g[row, :, column, :] = h[row - column]
    return g.reshape(n * plant.n_outputs, n * plant.n_inputs)


def make_context(plant, n, period_s=0.01):
    m, p = (plant.n_inputs, plant.n_outputs) if plant else (1, 1)
    limits = np.full(m, np.inf)
    return LawContext(period_s, n, m, p, np.zeros((n, p)), -limits, limits, limits, plant)


def make_trial(error, feedforward):
    n, p = error.shape
    return Trial(
        index=0,
        purpose=Purpose.LEARN,
        feedforward=feedforward,
        reference=error,
        output=np.zeros((n, p)),
        auxiliary=np.zeros((n, 0)),
        limited=np.zeros(feedforward.shape, dtype=bool),
        start_state=np.zeros(p),
    )


def update(law, error, feedforward, gain=1.0):
    return law.update(make_trial(error, feedforward), gain, {}, {}).feedforward


SIZES = [(1, 1), (2, 2), (3, 2), (1, 2)]


@pytest.mark.parametrize(("m", "p"), SIZES)
@pytest.mark.parametrize("n", [1, 2, 37])
def test_lifted_products_equal_the_dense_matrix_and_its_transpose(m, p, n):
    plant, rng = make_plant(m, p), np.random.default_rng(1)
    g, lifted = dense(plant, n), Lifted(plant.impulse_response(n))
    u, y = rng.normal(size=(n, m)), rng.normal(size=(n, p))
    scale = 1e-13 * max(np.abs(g).sum(), 1.0)
    assert np.allclose(lifted.apply(u).ravel(), g @ u.ravel(), atol=scale)
    assert np.allclose(lifted.adjoint(y).ravel(), g.T @ y.ravel(), atol=scale)


def test_the_adjoint_is_the_adjoint_at_a_long_horizon():
    lifted = Lifted(make_plant(2, 3).impulse_response(5000))
    rng = np.random.default_rng(2)
    u, y = rng.normal(size=(5000, 2)), rng.normal(size=(5000, 3))
    gu = lifted.apply(u)
    scale = np.linalg.norm(gu) * np.linalg.norm(y)
    assert abs(np.vdot(gu, y) - np.vdot(u, lifted.adjoint(y))) < 1e-13 * scale


@pytest.mark.parametrize(("m", "p"), SIZES)
def test_the_norm_is_the_largest_singular_value(m, p):
    plant = make_plant(m, p)
    found = norm(Lifted(plant.impulse_response(40)))
    assert found == pytest.approx(np.linalg.norm(dense(plant, 40), 2), rel=1e-3)


@pytest.mark.parametrize(("m", "p"), SIZES)
def test_gradient_adds_the_adjoint_of_the_error_in_units_of_the_largest_step(m, p):
    plant, rng = make_plant(m, p), np.random.default_rng(3)
    g = dense(plant, 30)
    e, u = rng.normal(size=(30, p)), rng.normal(size=(30, m))
    law = GradientSettings(step=0.3).build(make_context(plant, 30))
    step = 0.5 * 0.3 * 2.0 / np.linalg.norm(g, 2) ** 2
    expected = u + step * (g.T @ e.ravel()).reshape(u.shape)
    assert np.allclose(
        update(law, e, u, gain=0.5), expected, atol=1e-3 * np.linalg.norm(step * g.T @ e.ravel())
    )


def test_gradient_lowers_the_error_of_a_right_model_in_every_trial():
    plant = make_plant(2, 2)
    lifted = Lifted(plant.impulse_response(100))
    law = GradientSettings(step=0.9).build(make_context(plant, 100))
    r = np.random.default_rng(4).normal(size=(100, 2))
    u, norms = np.zeros((100, 2)), []
    for _ in range(30):
        e = r - lifted.apply(u)
        norms.append(np.linalg.norm(e))
        u = update(law, e, u)
    assert np.all(np.diff(norms) < 0.0)


@pytest.mark.parametrize(("m", "p"), SIZES)
def test_regularised_inverse_equals_the_normal_equations_per_frequency(m, p):
    g = make_plant(m, p).response(64)
    b = 0.1 * np.linalg.svd(g, compute_uv=False).max()
    gh = g.conj().swapaxes(1, 2)
    expected = np.linalg.solve(gh @ g + b**2 * np.eye(m), gh)
    assert np.allclose(regularised_inverse(g, 0.1), expected)


def test_the_inverse_of_a_right_model_learns_a_smooth_reference_in_one_trial():
    model = TransferFunctionSettings(
        period_s=0.01, numerator=(((0.0, 0.0, 0.2, 0.1),),), denominator=(((1.0, -1.2, 0.5),),)
    )
    plant = build_plant(model, 0.01)
    n = 200
    lifted = Lifted(plant.impulse_response(n))
    r = np.zeros((n, 1))
    r[40:160, 0] = np.sin(np.pi * np.arange(120) / 120) ** 4
    law = InverseSettings(regularisation=0.0).build(make_context(plant, n))
    u = update(law, r, np.zeros((n, 1)))
    assert np.abs(r - lifted.apply(u)).max() < 1e-9


def test_models_of_all_three_kinds_have_the_same_response():
    tf = TransferFunctionSettings(
        period_s=0.01, numerator=(((0.0, 2.0, 0.5),),), denominator=(((2.0, -1.0),),)
    ).build()
    ss = StateSpaceSettings(
        period_s=0.01,
        a=((0.5, 0.25), (0.0, 0.0)),
        b=((1.0,), (1.0,)),
        c=((1.0, 0.0),),
    ).build()
    assert np.allclose(tf.impulse_response(20), ss.impulse_response(20))
    lags = tuple(tuple(map(tuple, lag)) for lag in tf.impulse_response(80).tolist())
    fir = ImpulseResponseSettings(period_s=0.01, lags=lags).build()
    for n_fft in (16, 81, 256):
        assert np.allclose(fir.response(n_fft), tf.response(n_fft))


@pytest.mark.parametrize(
    ("settings", "said"),
    [
        (dict(numerator=(((1.0,),),), denominator=(((1.0, -1.0),),)), "pole of magnitude 1"),
        (dict(numerator=(((1.0,),),), denominator=(((0.0, 1.0),),)), "answer before its input"),
        (dict(numerator=(((1.0,),),), denominator=()), "model.denominator"),
    ],
)
def test_a_model_that_cannot_be_used_is_refused_by_name(settings, said):
    with pytest.raises(SettingError, match=said):
        TransferFunctionSettings(period_s=0.01, **settings).build()


def test_another_sample_period_is_refused():
    model = ImpulseResponseSettings(period_s=0.02, lags=(((1.0,),),))
    with pytest.raises(SettingError, match=r"expected the trial's 0\.01 s, found 0\.02 s"):
        build_plant(model, 0.01)


@pytest.mark.parametrize("settings", [InverseSettings(), GradientSettings()])
def test_laws_refuse_to_run_without_a_model_or_with_other_channels(settings):
    with pytest.raises(SettingError, match=r"add a table \[model\]"):
        settings.build(make_context(None, 10))
    wrong = LawContext(
        0.01, 10, 1, 1, np.zeros((10, 1)), *(np.ones(1),) * 3, plant=make_plant(2, 2)
    )
    with pytest.raises(SettingError, match="found 2 and 2"):
        settings.build(wrong)
