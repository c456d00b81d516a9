"""The norm-optimal law against dense solves of its normal equations."""

import numpy as np
import pytest

from trialrunner.core.errors import SettingError
from trialrunner.core.laws import LawContext
from trialrunner.core.laws.norm_optimal import FactorSolver, NormOptimalSettings
from trialrunner.core.plant_model import PlantModel, StateSpace
from trialrunner.core.trial import Purpose, Trial


def random_plant(m, p, order=4, delay=True, radius=0.8, seed=0):
    rng = np.random.default_rng(seed)
    a = rng.normal(size=(order, order))
    a *= radius / np.max(np.abs(np.linalg.eigvals(a)))
    d = np.zeros((p, m)) if delay else rng.normal(size=(p, m))
    return StateSpace(a, rng.normal(size=(order, m)), rng.normal(size=(p, order)), d)


def dense(plant, n):
    h = plant.impulse_response(n)
    p, m = plant.d.shape
    g = np.zeros((n, p, n, m))
    for row in range(n):
        for column in range(row + 1):
            g[row, :, column, :] = h[row - column]
    return g.reshape(n * p, n * m)


def build(plant, n, **weights):
    p, m = plant.d.shape
    limits = np.full(m, np.inf)
    context = LawContext(
        0.01, n, m, p, np.zeros((n, p)), -limits, limits, limits, PlantModel(m, p, plant)
    )
    return NormOptimalSettings(**weights).build(context)


def update(law, error, feedforward):
    n, p = error.shape
    limited = np.zeros(feedforward.shape, dtype=bool)
    trial = Trial(
        0, Purpose.LEARN, feedforward, error, 0 * error, np.zeros((n, 0)), limited, np.zeros(p)
    )
    return law.update(trial, 1.0, {}, {}).feedforward


@pytest.mark.parametrize(("m", "p"), [(1, 1), (2, 2), (3, 2), (1, 2)])
@pytest.mark.parametrize("delay", [True, False])
@pytest.mark.parametrize("n", [1, 2, 5, 60])
def test_the_step_solves_the_dense_normal_equations(m, p, delay, n):
    plant, rng = random_plant(m, p, delay=delay), np.random.default_rng(1)
    we, wu, wd = rng.uniform(0.5, 2, p), rng.uniform(0.01, 0.1, m), rng.uniform(0.01, 0.1, m)
    e, u = rng.normal(size=(n, p)), rng.normal(size=(n, m))
    law = build(plant, n, error_weight=tuple(we), input_weight=tuple(wu), step_weight=tuple(wd))
    g = dense(plant, n)
    weighted = g.T * np.tile(we, n)
    right = weighted @ e.ravel() - np.tile(wu, n) * u.ravel()
    step = np.linalg.solve(weighted @ g + np.diag(np.tile(wu + wd, n)), right).reshape(n, m)
    found = update(law, e, u) - u
    assert np.linalg.norm(found - step) < 1e-10 * np.linalg.norm(step) + 1e-14


def test_a_lightly_damped_plant_is_solved_to_ten_digits():
    # Poles of magnitude 0.999, many oscillations over the horizon.
    a = 0.999 * np.array([[np.cos(0.3), -np.sin(0.3)], [np.sin(0.3), np.cos(0.3)]])
    plant = StateSpace(a, np.array([[0.1], [0.0]]), np.array([[1.0, 0.5]]), np.zeros((1, 1)))
    n, e = 400, np.random.default_rng(2).normal(size=(400, 1))
    found = FactorSolver(plant, np.ones(1), np.full(1, 1e-3), n).solve(e)
    g = dense(plant, n)
    expected = np.linalg.solve(g.T @ g + 1e-3 * np.eye(n), g.T @ e)
    assert np.linalg.norm(found - expected) < 1e-10 * np.linalg.norm(expected)


def test_the_limit_of_learning_does_not_depend_on_the_step_weight():
    plant, n = random_plant(2, 2), 40
    g, r = dense(plant, 40), np.random.default_rng(3).normal(size=(40, 2))
    limit = np.linalg.solve(g.T @ g + 0.5 * np.eye(2 * n), g.T @ r.ravel()).reshape(n, 2)
    for step_weight in (0.05, 0.5):
        law = build(plant, n, input_weight=0.5, step_weight=step_weight)
        u = np.zeros((n, 2))
        for _ in range(80):
            u = update(law, r - (g @ u.ravel()).reshape(n, 2), u)
        assert np.allclose(u, limit, atol=1e-9)


def test_the_same_trial_gives_the_same_bits():
    plant, e = random_plant(2, 2), np.random.default_rng(4).normal(size=(100, 2))
    first, second = (update(build(plant, 100, step_weight=0.1), e, e) for _ in range(2))
    assert first.tobytes() == second.tobytes()


def test_weights_for_other_channels_are_refused_by_name():
    with pytest.raises(SettingError, match=r"law\.step_weight: .* 2 channels"):
        build(random_plant(2, 2), 10, step_weight=(0.1, 0.1, 0.1))
