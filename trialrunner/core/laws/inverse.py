"""Regularised inverse per frequency: u' = u + gain * g (G^H G + b^2 I)^-1 G^H e.

With a right model and no regularisation the error shrinks to 1 - g of itself in a trial; b keeps
the gain finite where the plant answers weakly. The inverse acts in both directions of time, so
that delay and zeros outside the unit circle need no special care; the error is padded with zeros
to more than twice its length so that the ends do not see each other.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar, Literal

import numpy as np

from trialrunner.core.bounds import STRICT, InsideTwo, NonNegative
from trialrunner.core.errors import SettingError
from trialrunner.core.laws import LawContext, Step, required_plant
from trialrunner.core.lifted import filtered
from trialrunner.core.plant_model import Complex
from trialrunner.core.trial import Array, Memory, Trial


@dataclass(frozen=True, kw_only=True)
class InverseSettings:
    """A regularised inverse of the model; needs the table [model]."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    kind: Literal["inverse"] = "inverse"
    learning_gain: InsideTwo = 1.0
    """Part of the error to be undone in a trial; 2 and more diverge even with a right model."""
    regularisation: NonNegative = 0.01
    """b, as a fraction of the model's largest gain: where the model's gain is below it, learning
    is slow instead of violent."""

    def build(self, context: LawContext) -> "InverseLaw":
        """Raises SettingError without a model that fits, or if it cannot be inverted."""
        from scipy.fft import next_fast_len

        plant = required_plant(context, self.kind)
        n_fft = next_fast_len(2 * context.n_samples, real=True)
        response = plant.response(n_fft)
        inverse = regularised_inverse(response, self.regularisation)
        if not np.all(np.isfinite(inverse)):
            raise SettingError(
                "law.regularisation: expected more than 0, because the model has no gain at some "
                f"frequency, found {self.regularisation}"
            )
        return InverseLaw(self.learning_gain * inverse, n_fft)


def regularised_inverse(response: Complex, relative: float) -> Complex:
    """(n_frequencies, n_inputs, n_outputs): V diag(s / (s^2 + b^2)) U^H by singular values.

    b is `relative` times the largest singular value of all frequencies. Infinite or NaN where a
    singular value and b are both zero.
    """
    left, values, right = np.linalg.svd(response, full_matrices=False)
    floor = relative * values.max()
    # Rounding noise is not a gain: without regularisation it would be inverted.
    values = np.where(values > 1e-12 * values.max(), values, 0.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        weights = values / (values**2 + floor**2)
    return np.asarray(
        right.conj().swapaxes(1, 2) @ (weights[:, :, None] * left.conj().swapaxes(1, 2))
    )


class InverseLaw:
    """Built by InverseSettings. Keeps nothing between trials."""

    def __init__(self, inverse: Complex, n_fft: int) -> None:
        """`inverse`: (n_fft // 2 + 1, n_inputs, n_outputs)."""
        from scipy.fft import irfft, rfft

        self._rfft, self._irfft = rfft, irfft
        self._inverse = np.ascontiguousarray(inverse.transpose(1, 2, 0))
        self._n_fft = n_fft

    def update(
        self, trial: Trial, gain: float, memory: Memory, arrays: Mapping[str, Array]
    ) -> Step:
        error = self._rfft(np.ascontiguousarray(trial.error.T), self._n_fft)
        rows = filtered(self._inverse, error)
        correction = self._irfft(rows, self._n_fft, overwrite_x=True)
        return Step(trial.feedforward + gain * correction[:, : len(trial.feedforward)].T)
