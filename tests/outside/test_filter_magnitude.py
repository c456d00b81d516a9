"""The Q-filter against scipy.signal and against the known behaviour of forward-backward filters."""

import math

import numpy as np
import pytest
from scipy import ndimage, signal

from trialrunner.core.filters import QFilter, butterworth_magnitude, cosine_frequencies_hz
from trialrunner.core.settings import FilterSettings
from trialrunner.core.trial import Array

PERIOD_S = 0.0005


@pytest.mark.parametrize("order", [1, 2, 3, 4, 8])
@pytest.mark.parametrize("bandwidth_hz", [2.0, 90.0, 700.0, 990.0])
def test_the_butterworth_magnitude_is_scipys(order: int, bandwidth_hz: float) -> None:
    """Against scipy.signal.butter and sosfreqz at every cosine frequency."""
    frequency_hz = cosine_frequencies_hz(500, PERIOD_S)
    sections = signal.butter(order, bandwidth_hz, fs=1.0 / PERIOD_S, output="sos")
    _, response = signal.sosfreqz(sections, worN=frequency_hz, fs=1.0 / PERIOD_S)
    ours = butterworth_magnitude(frequency_hz, bandwidth_hz, order, PERIOD_S)
    assert np.allclose(ours, np.abs(response), rtol=0, atol=1e-9)


def decibels(filtered: Array, wave: Array) -> float:
    """Gain in the middle of the signal, where ends do not matter."""
    middle = slice(len(wave) // 4, -len(wave) // 4)
    return 20.0 * math.log10(np.std(filtered[middle]) / np.std(wave[middle]))


@pytest.mark.parametrize("order", [1, 2, 4])
def test_forward_backward_is_six_decibels_down_where_ours_is_three(order: int) -> None:
    """Common practice, no source: running a filter both ways squares its magnitude, so its design
    frequency is a -6 dB point. Measured with scipy.signal.sosfiltfilt."""
    n_samples, number = 8000, 400
    bandwidth_hz = number / (2 * n_samples * PERIOD_S)
    wave = np.cos(np.pi * number * (np.arange(n_samples) + 0.5) / n_samples)
    sections = signal.butter(order, bandwidth_hz, fs=1.0 / PERIOD_S, output="sos")
    both_ways = signal.sosfiltfilt(sections, wave)
    chosen = FilterSettings(shape="butterworth", bandwidth_hz=bandwidth_hz, order=order)
    ours = QFilter(chosen, n_samples, PERIOD_S).apply(wave[:, None])[:, 0]
    assert decibels(both_ways, wave) == pytest.approx(-6.02, abs=0.02)
    assert decibels(ours, wave) == pytest.approx(-3.01, abs=0.01)


@pytest.mark.parametrize(("order", "factor"), [(1, 0.644), (2, 0.802), (4, 0.896)])
def test_the_three_decibel_point_of_forward_backward_lies_below_its_design(
    order: int, factor: float
) -> None:
    """Factors recomputed for this project: (sqrt(2) - 1)^(1 / (2 order)) for low frequencies. A
    forward-backward filter designed at f / factor has the -3 dB point that ours has at f."""
    bandwidth_hz = 5.0
    point_hz = np.array([factor * bandwidth_hz])
    once = butterworth_magnitude(point_hz, bandwidth_hz, order, PERIOD_S)
    assert 20.0 * math.log10(float(once[0]) ** 2) == pytest.approx(-3.01, abs=0.01)


def norm_of(matrix: Array) -> float:
    return float(np.linalg.norm(matrix, 2))


def test_ours_does_not_amplify_where_the_usual_filter_does() -> None:
    """Measured: scipy.signal.sosfiltfilt with its default odd padding has an operator norm of about
    1.5 on 400 samples, so |Q (1 - G L)| < 1 does not follow from the frequency curve; ours is 1."""
    n_samples, bandwidth_hz = 400, 50.0
    sections = signal.butter(2, bandwidth_hz, fs=1.0 / PERIOD_S, output="sos")
    usual = signal.sosfiltfilt(sections, np.eye(n_samples), axis=0)
    chosen = FilterSettings(shape="butterworth", bandwidth_hz=bandwidth_hz)
    ours = QFilter(chosen, n_samples, PERIOD_S).apply(np.eye(n_samples))
    assert norm_of(usual) > 1.3
    assert norm_of(ours) <= 1.0 + 1e-12


def test_the_gaussian_magnitude_belongs_to_a_gaussian_in_time() -> None:
    """The Fourier transform of a Gaussian of standard deviation s has magnitude
    exp(-(2 pi f s)^2 / 2) (textbook); -3 dB at f gives s = sqrt(ln 2) / (2 pi f). Against
    scipy.ndimage.gaussian_filter1d, whose "reflect" mode is the same even reflection."""
    bandwidth_hz = 20.0
    spread = math.sqrt(math.log(2.0)) / (2.0 * math.pi * bandwidth_hz) / PERIOD_S
    noise = np.random.default_rng(1).normal(size=3000)
    smooth = ndimage.gaussian_filter1d(noise, spread, mode="reflect", truncate=9.0)
    chosen = FilterSettings(shape="gaussian", bandwidth_hz=bandwidth_hz)
    ours = QFilter(chosen, noise.size, PERIOD_S).apply(noise[:, None])[:, 0]
    assert np.allclose(ours, smooth, rtol=0, atol=1e-9)
