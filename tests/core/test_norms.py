"""Error norm and repeatability floor."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from trialrunner.core.errors import ShapeError
from trialrunner.core.norms import Repeatability, error_norm, error_peak, repeatability_floor

SCALES = np.array([0.1, 2.0])


def test_an_error_of_one_scale_everywhere_has_norm_one() -> None:
    """Channels of different units are comparable once scaled."""
    error = np.ones((50, 1)) * SCALES * np.array([1.0, -1.0])
    assert error_norm(error, SCALES) == pytest.approx(1.0, abs=1e-15)
    assert error_peak(error, SCALES) == 1.0


def test_the_norm_is_the_root_of_the_mean_square() -> None:
    """Computed term by term."""
    error = np.array([[0.3, 4.0], [0.0, -2.0]])
    expected = math.sqrt((9.0 + 4.0 + 0.0 + 1.0) / 4.0)
    assert error_norm(error, SCALES) == pytest.approx(expected, rel=1e-15)
    assert error_peak(error, SCALES) == pytest.approx(3.0, rel=1e-15)


def test_a_missing_sample_makes_the_norm_nan() -> None:
    """So that no trial with a gap looks good."""
    error = np.array([[0.1, 0.2], [math.nan, 0.0]])
    assert math.isnan(error_norm(error, SCALES))
    assert math.isnan(error_peak(error, SCALES))


def test_an_error_too_large_to_square_has_an_infinite_norm() -> None:
    """No warning and no exception: a guard sees infinity."""
    assert error_norm(np.array([[1e200, 0.0]]), SCALES) == math.inf


@settings(max_examples=50, deadline=None)
@given(st.integers(2, 12), st.integers(0, 2**32 - 1), st.sampled_from([0.0, 1e3, -1e6]))
def test_the_floor_is_the_spread_about_the_mean_trial(
    n_trials: int, seed: int, bias: float
) -> None:
    """Equal to numpy's standard deviation over trials with n - 1, whatever part repeats."""
    errors = np.random.default_rng(seed).normal(size=(n_trials, 30, 2)) * SCALES + bias
    variance = np.var(errors, axis=0, ddof=1) / SCALES**2
    expected = math.sqrt(variance.mean())
    assert repeatability_floor(errors, SCALES) == pytest.approx(expected, rel=1e-7)


def test_the_streaming_form_says_the_same_after_each_trial() -> None:
    """Trials need not be kept; mean and spread after each equal those of all so far."""
    errors = np.random.default_rng(1).normal(size=(6, 40, 2))
    spread = Repeatability.empty(40, 2)
    for i, error in enumerate(errors, start=1):
        spread = spread.add(error)
        assert spread.n_trials == i
        assert np.allclose(spread.mean, errors[:i].mean(axis=0), atol=1e-14)
        if i > 1:
            assert spread.floor(SCALES) == repeatability_floor(errors[:i], SCALES)


def test_one_trial_has_no_floor() -> None:
    """NaN, not zero: nothing is known of the spread."""
    assert math.isnan(repeatability_floor(np.zeros((1, 5, 2)), SCALES))
    assert math.isnan(Repeatability.empty(5, 2).floor(SCALES))


def test_identical_trials_have_floor_zero() -> None:
    """What repeats exactly can all be learned."""
    error = np.random.default_rng(2).normal(size=(5, 2))
    assert repeatability_floor(np.stack([error] * 4), SCALES) == 0.0


def test_a_trial_of_another_shape_is_refused() -> None:
    """Expected and found shapes are named."""
    with pytest.raises(ShapeError, match=r"expected shape \(5, 2\), found \(4, 2\)"):
        Repeatability.empty(5, 2).add(np.zeros((4, 2)))
