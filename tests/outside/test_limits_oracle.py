"""Limits against general-purpose optimisers: scipy.optimize's SLSQP, lsq_linear and linprog."""

import numpy as np
import pytest
from scipy import optimize

from trialrunner.core.projection import project
from trialrunner.core.rate_limit import clamp_rate, envelope
from trialrunner.core.trial import Array


def cases(count: int) -> list[tuple[Array, Array, Array, float]]:
    """Small random goals with box, cone and rate."""
    rng = np.random.default_rng(20)
    found = []
    for _ in range(count):
        n_samples, rate = int(rng.integers(2, 14)), float(rng.choice([0.1, 0.5, 1.5]))
        goal = rng.normal(size=n_samples) * rng.choice([0.5, 3.0])
        cone = rate * np.arange(n_samples)
        upper, lower = np.minimum(1.2, cone + 0.1), np.maximum(-0.8, -cone[::-1])
        found.append((goal, lower, upper, rate))
    return found


@pytest.mark.parametrize("case", cases(25))
def test_no_optimiser_finds_a_nearer_signal(case: tuple[Array, Array, Array, float]) -> None:
    """The projection's cost is at most that of SLSQP on the same constraints, and its answer the
    same to the accuracy of SLSQP."""
    goal, lower, upper, rate = case
    differences = np.diff(np.eye(goal.size), axis=0)
    start = clamp_rate(np.clip(goal, lower, upper), rate)
    answer = optimize.minimize(
        lambda x: 0.5 * np.sum((x - goal) ** 2),
        start,
        jac=lambda x: x - goal,
        bounds=list(zip(lower, upper, strict=True)),
        constraints=[
            {
                "type": "ineq",
                "fun": lambda x: rate - differences @ x,
                "jac": lambda x: -differences,
            },
            {"type": "ineq", "fun": lambda x: rate + differences @ x, "jac": lambda x: differences},
        ],
        method="SLSQP",
        options={"maxiter": 1000, "ftol": 1e-14},
    )
    nearest = project(goal, lower, upper, rate)
    assert np.sum((nearest - goal) ** 2) <= np.sum((answer.x - goal) ** 2) + 1e-9
    assert np.allclose(nearest, answer.x, rtol=0, atol=1e-4)


@pytest.mark.parametrize("case", cases(10))
def test_with_a_box_alone_it_is_the_bounded_least_squares_solution(
    case: tuple[Array, Array, Array, float],
) -> None:
    """Against scipy.optimize.lsq_linear with the identity."""
    goal, lower, upper, _ = case
    answer = optimize.lsq_linear(np.eye(goal.size), goal, bounds=(lower, upper + 1e-12), tol=1e-14)
    assert np.allclose(project(goal, lower, upper, 100.0), answer.x, rtol=0, atol=1e-6)


@pytest.mark.parametrize("case", cases(25))
def test_no_linear_programme_finds_a_smaller_largest_deviation(
    case: tuple[Array, Array, Array, float],
) -> None:
    """The envelope against scipy.optimize.linprog: least t with |x - goal| <= t within the rate."""
    goal, _, _, rate = case
    n_samples = goal.size
    identity, ones = np.eye(n_samples), np.ones((n_samples, 1))
    differences = np.diff(identity, axis=0)
    no_t = np.zeros((n_samples - 1, 1))
    answer = optimize.linprog(
        np.r_[np.zeros(n_samples), 1.0],
        A_ub=np.vstack(
            [
                np.hstack([identity, -ones]),
                np.hstack([-identity, -ones]),
                np.hstack([differences, no_t]),
                np.hstack([-differences, no_t]),
            ]
        ),
        b_ub=np.r_[goal, -goal, np.full(2 * (n_samples - 1), rate)],
        bounds=[(None, None)] * n_samples + [(0.0, None)],
    )
    assert np.abs(envelope(goal, rate) - goal).max() == pytest.approx(answer.fun, abs=1e-9)
