"""Zero-phase filters: operator norm, symmetry, constants, bandwidth."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from trialrunner.core.errors import ShapeError
from trialrunner.core.filters import (
    QFilter,
    ZeroPhase,
    cosine_frequencies_hz,
    first_order_magnitude,
)
from trialrunner.core.settings import FilterSettings
from trialrunner.core.trial import Array

PERIOD_S = 0.001

filters = st.builds(
    FilterSettings,
    shape=st.sampled_from(["butterworth", "gaussian"]),
    bandwidth_hz=st.sampled_from([0.5, 3.0, 40.0, 200.0, 499.0, 800.0]),
    order=st.sampled_from([1, 2, 4, 9, 40]),
)


def as_matrix(settings_: FilterSettings, n_samples: int) -> Array:
    """The filter as a matrix: its answer to each unit vector."""
    return QFilter(settings_, n_samples, PERIOD_S).apply(np.eye(n_samples))


def cosine(n_samples: int, number: int) -> Array:
    """The DCT-II's cosine of frequency number / (2 n period), (n_samples, 1)."""
    k = np.arange(n_samples)
    return np.cos(np.pi * number * (k + 0.5) / n_samples)[:, None]


@settings(max_examples=80, deadline=None)
@given(filters, st.integers(1, 90))
def test_as_an_operator_it_never_amplifies(chosen: FilterSettings, n_samples: int) -> None:
    """Its norm is at most 1, it is symmetric and has no negative eigenvalue, at every length."""
    matrix = as_matrix(chosen, n_samples)
    assert np.linalg.norm(matrix, 2) <= 1.0 + 1e-12
    assert np.allclose(matrix, matrix.T, rtol=0, atol=1e-14)
    assert np.linalg.eigvalsh(matrix).min() >= -1e-12


@settings(max_examples=50, deadline=None)
@given(filters, st.integers(1, 500), st.sampled_from([1.0, -3e-7, 4e8]))
def test_constants_pass_unchanged(chosen: FilterSettings, n_samples: int, level: float) -> None:
    """Also at the ends, for every bandwidth."""
    constant = np.full((n_samples, 1), level)
    filtered = QFilter(chosen, n_samples, PERIOD_S).apply(constant)
    assert np.allclose(filtered, constant, rtol=1e-13, atol=0)


@pytest.mark.parametrize("shape", ["butterworth", "gaussian"])
@pytest.mark.parametrize("order", [1, 2, 4])
def test_the_magnitude_is_three_decibels_down_at_the_bandwidth(shape: str, order: int) -> None:
    """A cosine of the bandwidth's frequency comes out at 1/sqrt(2), without phase shift."""
    n_samples, number = 1000, 60
    bandwidth_hz = number / (2 * n_samples * PERIOD_S)
    chosen = FilterSettings(shape=shape, bandwidth_hz=bandwidth_hz, order=order)
    wave = cosine(n_samples, number)
    filtered = QFilter(chosen, n_samples, PERIOD_S).apply(wave)
    assert np.allclose(filtered, wave / math.sqrt(2.0), rtol=0, atol=1e-12)


def test_columns_are_filtered_each_by_itself() -> None:
    """Two channels together give what they give alone."""
    signal = np.random.default_rng(3).normal(size=(257, 2))
    chosen = QFilter(FilterSettings(bandwidth_hz=50.0), 257, PERIOD_S)
    alone = [chosen.apply(signal[:, i : i + 1]) for i in range(2)]
    assert np.allclose(chosen.apply(signal), np.hstack(alone), rtol=0, atol=1e-15)


@pytest.mark.parametrize(
    "chosen",
    [
        FilterSettings(shape="none", bandwidth_hz=10.0),
        FilterSettings(bandwidth_hz=math.inf),
        FilterSettings(shape="butterworth", bandwidth_hz=500.0),
    ],
)
def test_no_filter_and_bandwidths_from_nyquist_on_leave_every_bit(chosen: FilterSettings) -> None:
    """The signal itself comes back."""
    signal = np.random.default_rng(4).normal(size=(64, 1))
    q_filter = QFilter(chosen, 64, PERIOD_S)
    assert q_filter.is_identity
    assert np.array_equal(q_filter.apply(signal), signal)


def test_the_same_signal_gives_the_same_bits_and_is_not_changed() -> None:
    """Filtering is a pure function."""
    signal = np.random.default_rng(5).normal(size=(1001, 3))
    before = signal.copy()
    first = QFilter(FilterSettings(bandwidth_hz=20.0), 1001, PERIOD_S).apply(signal)
    second = QFilter(FilterSettings(bandwidth_hz=20.0), 1001, PERIOD_S).apply(signal)
    assert np.array_equal(first, second)
    assert np.array_equal(signal, before)


def test_a_first_order_low_pass_has_the_magnitude_of_its_time_constant() -> None:
    """|H| = 1/|1 + j w tau| on each cosine."""
    n_samples, number, tau_s = 400, 33, 0.004
    frequency_hz = cosine_frequencies_hz(n_samples, PERIOD_S)
    filtered = ZeroPhase(first_order_magnitude(frequency_hz, tau_s)).apply(
        cosine(n_samples, number)
    )
    gain = 1.0 / abs(1.0 + 2j * np.pi * frequency_hz[number] * tau_s)
    assert np.allclose(filtered, gain * cosine(n_samples, number), rtol=0, atol=1e-13)


def test_a_signal_of_another_length_is_refused() -> None:
    """Expected and found shapes are named."""
    q_filter = QFilter(FilterSettings(bandwidth_hz=20.0), 100, PERIOD_S)
    with pytest.raises(ShapeError, match=r"expected shape \(100, n_channels\), found \(99, 1\)"):
        q_filter.apply(np.zeros((99, 1)))
