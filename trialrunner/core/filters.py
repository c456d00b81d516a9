"""Zero-phase filters on the DCT-II: the Q-filter and the derivative's low-pass.

A signal of n samples is the sum of cosines of frequency m/(2 n period), m = 0..n-1, which is to
say that it is reflected evenly at both ends and repeated. Each cosine is multiplied by a magnitude
between 0 and 1. The transform is orthogonal, so as an operator on the n samples the filter is
symmetric, its norm is its largest magnitude, that is 1, and it never amplifies, also not at the
ends, where a forward-backward filter with odd padding has norm 1.5. Constants pass unchanged. The
ends are not pulled to zero: pins are the business of `limits`.
"""

import math

import numpy as np

from trialrunner.core.errors import ShapeError
from trialrunner.core.settings import FilterSettings
from trialrunner.core.trial import Array


def cosine_frequencies_hz(n_samples: int, period_s: float) -> Array:
    """(n_samples,): frequencies of the DCT-II's cosines, from 0 to just under Nyquist, in Hz."""
    return np.arange(n_samples) / (2.0 * n_samples * period_s)


def butterworth_magnitude(
    frequency_hz: Array, bandwidth_hz: float, order: int, period_s: float
) -> Array:
    """Magnitude of a sampled Butterworth low-pass, passed once: -3 dB at `bandwidth_hz`.

    |H| = 1 / sqrt(1 + (tan(pi f T) / tan(pi fc T))^(2 order)), the bilinear transform of the
    analogue filter with its -3 dB frequency kept (Oppenheim and Schafer, Discrete-Time Signal
    Processing, from memory). A filter run forwards and backwards has this magnitude squared and is
    -6 dB at its design frequency; here -3 dB means -3 dB.
    """
    ratio = np.tan(np.pi * frequency_hz * period_s) / math.tan(math.pi * bandwidth_hz * period_s)
    with np.errstate(over="ignore"):  # far above a steep cut-off: infinity, magnitude zero
        return np.asarray(1.0 / np.sqrt(1.0 + ratio ** (2 * order)))


def gaussian_magnitude(frequency_hz: Array, bandwidth_hz: float) -> Array:
    """|H| = 2^(-(f / bandwidth)^2 / 2): -3 dB at `bandwidth_hz`, no ringing in time."""
    with np.errstate(over="ignore", under="ignore"):
        return np.asarray(np.exp2(-0.5 * (frequency_hz / bandwidth_hz) ** 2))


def first_order_magnitude(frequency_hz: Array, time_constant_s: float) -> Array:
    """|H| = 1 / sqrt(1 + (2 pi f tau)^2): -3 dB at 1 / (2 pi tau)."""
    return np.asarray(1.0 / np.hypot(1.0, 2.0 * np.pi * time_constant_s * frequency_hz))


class ZeroPhase:
    """Multiplies the cosines of each column by a magnitude; O(n log n), no matrix."""

    def __init__(self, magnitude: Array) -> None:
        """`magnitude`: (n_samples,), one value a cosine frequency."""
        from scipy.fft import dct, idct  # 0.4 s to import: not for commands that never filter

        self._dct, self._idct = dct, idct
        self._magnitude = magnitude[:, np.newaxis]

    def apply(self, signal: Array) -> Array:
        """The filtered columns of `signal`, (n_samples, n_channels); a new array."""
        n_samples = len(self._magnitude)
        if signal.ndim != 2 or len(signal) != n_samples:
            raise ShapeError(
                f"signal to filter: expected shape ({n_samples}, n_channels), found {signal.shape}"
            )
        spectrum = self._dct(signal, axis=0)
        spectrum *= self._magnitude
        return np.asarray(self._idct(spectrum, axis=0, overwrite_x=True))


class QFilter:
    """The Q-filter of a run; the identity for shape "none" or a bandwidth at or above Nyquist."""

    def __init__(self, settings: FilterSettings, n_samples: int, period_s: float) -> None:
        nyquist_hz = 0.5 / period_s
        self._filter: ZeroPhase | None = None
        if settings.shape != "none" and settings.bandwidth_hz < nyquist_hz:
            self._filter = ZeroPhase(_magnitude(settings, n_samples, period_s))

    @property
    def is_identity(self) -> bool:
        return self._filter is None

    def apply(self, signal: Array) -> Array:
        """The filtered columns of `signal`, (n_samples, n_channels); `signal` itself if identity.

        Raises ShapeError if `signal` is not of the filter's length.
        """
        return signal if self._filter is None else self._filter.apply(signal)


def _magnitude(settings: FilterSettings, n_samples: int, period_s: float) -> Array:
    frequency_hz = cosine_frequencies_hz(n_samples, period_s)
    if settings.shape == "butterworth":
        return butterworth_magnitude(frequency_hz, settings.bandwidth_hz, settings.order, period_s)
    return gaussian_magnitude(frequency_hz, settings.bandwidth_hz)
