"""Products with the lifted plant G and its adjoint, by FFT with kept spectra; no N x N array.

G is block lower-triangular Toeplitz of the Markov parameters, the map from a feedforward over a
trial to the output over that trial, from rest.
"""

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from trialrunner.core.errors import require_shape
from trialrunner.core.trial import Array


class Lifted:
    """G (n_samples n_outputs by n_samples n_inputs) of an impulse response."""

    def __init__(self, impulse_response: Array) -> None:
        """`impulse_response`: (n_samples, n_outputs, n_inputs)."""
        from scipy.fft import irfft, next_fast_len, rfft  # 0.4 s to import

        self._rfft, self._irfft = rfft, irfft
        self.n_samples, self.n_outputs, self.n_inputs = impulse_response.shape
        self._n_fft = next_fast_len(2 * self.n_samples - 1, real=True)
        # Channels first, each row contiguous: the products below run along memory.
        by_pair = np.ascontiguousarray(impulse_response.transpose(1, 2, 0))
        self._spectrum = rfft(by_pair, self._n_fft)
        # Kept, because conjugating at each product costs up to a fifth of it.
        self._adjoint = np.ascontiguousarray(self._spectrum.conj().swapaxes(0, 1))

    def apply(self, signal: Array) -> Array:
        """G u: (n_samples, n_inputs) to (n_samples, n_outputs). Raises ShapeError."""
        require_shape("input of the model", signal, (self.n_samples, self.n_inputs))
        return self._product(self._spectrum, signal)

    def adjoint(self, signal: Array) -> Array:
        """G' e: (n_samples, n_outputs) to (n_samples, n_inputs). Raises ShapeError."""
        require_shape("output of the model", signal, (self.n_samples, self.n_outputs))
        return self._product(self._adjoint, signal)

    def _product(self, spectrum: NDArray[np.complex128], signal: Array) -> Array:
        channels = self._rfft(np.ascontiguousarray(signal.T), self._n_fft)
        rows = filtered(spectrum, channels)
        back = self._irfft(rows, self._n_fft, overwrite_x=True)
        return np.ascontiguousarray(back[:, : self.n_samples].T)


def filtered(spectrum: NDArray[np.complex128], channels: Any) -> NDArray[np.complex128]:
    """(n_rows, n): each row of `spectrum` (n_rows, n_channels, n) times `channels`, summed.

    Row by row, which is faster than einsum or matmul; a single channel is overwritten.
    """
    if spectrum.shape[:2] == (1, 1):
        channels *= spectrum[0]
        return np.asarray(channels)
    rows = np.empty((len(spectrum), channels.shape[1]), dtype=np.complex128)
    scratch = np.empty(channels.shape[1], dtype=np.complex128)
    for row, of_row in zip(rows, spectrum, strict=True):
        np.multiply(of_row[0], channels[0], out=row)
        for one, channel in zip(of_row[1:], channels[1:], strict=True):
            np.multiply(one, channel, out=scratch)
            row += scratch
    return rows


def norm(lifted: Lifted, max_steps: int = 200, tolerance: float = 1e-5) -> float:
    """Largest singular value of G by power iteration on G'G, from a fixed start vector."""
    count = lifted.n_samples * lifted.n_inputs
    start = 1.0 + np.cos(0.7 * np.arange(count) ** 1.5)
    return float(
        np.sqrt(
            _largest_eigenvalue(
                lambda v: lifted.adjoint(lifted.apply(v)),
                start.reshape(lifted.n_samples, lifted.n_inputs),
                max_steps,
                tolerance,
            )
        )
    )


def _largest_eigenvalue(
    operator: Callable[[Array], Array], start: Array, max_steps: int, tolerance: float
) -> float:
    vector, found = start / np.linalg.norm(start), 0.0
    for _ in range(max_steps):
        image = operator(vector)
        before, found = found, float(np.linalg.norm(image))
        if found == 0.0 or abs(found - before) <= tolerance * found:
            break
        vector = image / found
    return found
