"""Least-squares projection on box and rate."""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from trialrunner.core.projection import project
from trialrunner.core.rate_limit import clamp_rate
from trialrunner.core.trial import Array

Case = tuple[Array, Array, Array, float]


@st.composite
def cases(draw: st.DrawFn, max_size: int = 60) -> Case:
    """Goal, lower, upper, rate: box, cones at the ends, and a cap about a former signal."""
    n_samples = draw(st.integers(1, max_size))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    rate = draw(st.sampled_from([0.1, 0.3, 1.0, 2.0]))
    size = draw(st.sampled_from([0.1, 0.5, 2.0, 5.0]))
    goal = size * rng.normal(size=n_samples)
    if draw(st.booleans()):
        goal = np.cumsum(goal)
    box = draw(st.sampled_from([0.5, 1.5, 100.0]))
    lower, upper = np.full(n_samples, -0.7 * box), np.full(n_samples, box)
    cone = rate * np.arange(n_samples)
    for reachable in (cone, cone[::-1]):
        if draw(st.booleans()):
            lower, upper = np.maximum(lower, -reachable), np.minimum(upper, reachable)
    if draw(st.booleans()):
        former = clamp_rate(np.clip(rng.normal(size=n_samples), lower, upper), rate)
        lower, upper = np.maximum(lower, former - 0.2), np.minimum(upper, former + 0.2)
    return goal, lower, upper, rate


def is_within(signal: Array, case: Case, slack: float = 1e-12) -> bool:
    _, lower, upper, rate = case
    return bool(
        np.all(signal >= lower - slack)
        and np.all(signal <= upper + slack)
        and np.all(np.abs(np.diff(signal)) <= rate + slack)
    )


@settings(max_examples=150, deadline=None)
@given(cases(), st.integers(0, 2**32 - 1))
def test_no_signal_within_limits_is_on_the_far_side(case: Case, seed: int) -> None:
    """The defining property of a projection p of g on a convex set: (g - p)'(x - p) <= 0 for every
    x in the set; tried for clamped random signals and for small changes of p."""
    goal, lower, upper, rate = case
    nearest = project(*case)
    assert is_within(nearest, case)
    rng = np.random.default_rng(seed)
    for size in (3.0, 0.3, 0.01):
        for base in (np.zeros(goal.size), nearest, goal):
            other = base + size * rng.normal(size=goal.size)
            other = clamp_rate(np.clip(other, lower, upper), rate)
            assert is_within(other, case)
            assert (goal - nearest) @ (other - nearest) <= 1e-9 * (1.0 + goal @ goal)


@settings(max_examples=100, deadline=None)
@given(cases())
def test_what_is_within_limits_is_its_own_projection(case: Case) -> None:
    """Not one bit changes where the signal was within limits already."""
    goal, lower, upper, rate = case
    inside = clamp_rate(np.clip(goal, lower, upper), rate)
    again = project(inside, lower, upper, rate)
    assert np.allclose(again, inside, rtol=0, atol=1e-12)


def test_the_projection_halves_a_step_about_its_middle() -> None:
    """A step with a rate of an eighth of it becomes a ramp centred on the step."""
    goal = np.repeat([0.0, 8.0], 20)
    wide = np.full(40, 100.0)
    nearest = project(goal, -wide, wide, 1.0)
    assert np.allclose(nearest - 4.0, -(nearest - 4.0)[::-1], atol=1e-12)
    assert np.allclose(np.diff(nearest)[16:23], 1.0)


def test_far_stretches_do_not_touch_each_other() -> None:
    """Samples between two steps that the ramps do not reach keep every bit."""
    rng = np.random.default_rng(8)
    goal = 0.001 * rng.normal(size=4000)
    goal[1000:] += 1.0
    goal[3000:] -= 1.0
    wide = np.full(4000, 10.0)
    nearest = project(goal, -wide, wide, 0.02)
    assert np.array_equal(nearest[1200:2800], goal[1200:2800])
    assert not np.array_equal(nearest[950:1050], goal[950:1050])
