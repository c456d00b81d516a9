"""How much of a signal lies in each octave below Nyquist; pure."""

import numpy as np

from trialrunner.core.filters import cosine_frequencies_hz
from trialrunner.core.trial import Array

LEAST_COSINES = 8
"""Fewer cosines make no band of their own: their energy scatters too much from trial to trial."""

MOST_BANDS = 10


def octave_edges_hz(n_samples: int, period_s: float) -> tuple[float, ...]:
    """Edges of the bands, lowest first: 0, then octaves up to Nyquist."""
    edges, cosines = [0.5 / period_s], n_samples // 2
    while cosines >= LEAST_COSINES and len(edges) < MOST_BANDS:
        edges.append(0.5 * edges[-1])
        cosines //= 2
    return (0.0, *reversed(edges))


def band_levels(signal: Array, scales: Array, period_s: float) -> Array:
    """(n_bands,): root mean square of the scaled signal in each band of `octave_edges_hz`.

    `signal`: (n_samples, n_channels), `scales`: (n_channels,). The squares add up to that of the
    whole (DCT-II, orthogonal; it reflects the ends, so that a trial that ends where it did not
    begin shows no false high frequencies). The mean over channels is taken, as in the error norm.
    """
    from scipy.fft import dct  # 0.4 s to import

    n_samples = len(signal)
    # One channel a row: sums along a short last axis are ten times slower.
    rows = dct(np.ascontiguousarray(signal.T) / scales[:, None], axis=1, norm="ortho")
    power = np.square(rows).mean(axis=0) / n_samples
    edges = octave_edges_hz(n_samples, period_s)
    firsts = np.searchsorted(cosine_frequencies_hz(n_samples, period_s), edges[:-1])
    return np.asarray(np.sqrt(np.add.reduceat(power, firsts)))
