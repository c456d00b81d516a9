"""How large an error is, and how far trials repeat."""

from dataclasses import dataclass

import numpy as np

from trialrunner.core.errors import require_shape
from trialrunner.core.trial import Array


def error_norm(error: Array, scales: Array) -> float:
    """Scaled root mean square: sqrt(mean over samples and channels of (error / scale)^2).

    `error`: (n_samples, n_outputs); `scales`: (n_outputs,), the error of each channel that counts
    as 1. Without unit; NaN if any sample is missing, infinity if the square overflows.
    """
    with np.errstate(over="ignore"):
        rows = np.ascontiguousarray(error.T) / scales[:, None]
        return float(np.sqrt(np.mean(np.square(rows, out=rows))))


def error_peak(error: Array, scales: Array) -> float:
    """The largest |error| / scale over samples and channels; NaN if any sample is missing."""
    scaled = error / scales
    return float(np.maximum(scaled.max(), -scaled.min()))


@dataclass(frozen=True)
class Repeatability:
    """Spread of trials run with the same feedforward, without keeping them (Welford 1962).

    Holds the running mean error and the sum of squared deviations from it, so that the floor can
    be told after each trial.
    """

    n_trials: int
    mean: Array
    """(n_samples, n_outputs): mean error, the part that repeats."""
    squares: Array
    """(n_samples, n_outputs): sum over trials of squared deviations from the mean."""

    @classmethod
    def empty(cls, n_samples: int, n_outputs: int) -> "Repeatability":
        zeros = np.zeros((n_samples, n_outputs))
        return cls(0, zeros, zeros)

    def add(self, error: Array) -> "Repeatability":
        """With one more trial; `error`: (n_samples, n_outputs)."""
        require_shape("error", error, self.mean.shape)
        n_trials = self.n_trials + 1
        change = error - self.mean
        mean = self.mean + change / n_trials
        return Repeatability(n_trials, mean, self.squares + change * (error - mean))

    def floor(self, scales: Array) -> float:
        """The repeatability floor; see `repeatability_floor`."""
        if self.n_trials < 2:
            return float("nan")
        variance = self.squares / (self.n_trials - 1)
        return float(np.sqrt(np.mean(variance / np.square(scales))))


def path_repeatability(paths: Array) -> float:
    """Path repeatability as ISO 9283 defines it (RT_p), in the unit of `paths`.

    The largest over the samples of mean + 3 standard deviations of the trials' distances from
    their mean path; the standard deviation has n - 1 degrees of freedom. `paths`: (n_trials,
    n_samples, n_axes), all axes in one unit of length; NaN for fewer than two trials.
    """
    if len(paths) < 2:
        return float("nan")
    distances = np.linalg.norm(paths - paths.mean(axis=0), axis=2)
    return float(np.max(distances.mean(axis=0) + 3.0 * distances.std(axis=0, ddof=1)))


def repeatability_floor(errors: Array, scales: Array) -> float:
    """Root mean square of the deviation from the mean trial, in units of `error_norm`.

    sqrt(mean over samples and channels of s^2), s the standard deviation over trials with n - 1
    degrees of freedom, scaled. It is the error norm that no learning gets below, because it does
    not repeat. `errors`: (n_trials, n_samples, n_outputs); NaN for fewer than two trials.
    """
    spread = Repeatability.empty(*errors.shape[1:])
    for error in errors:
        spread = spread.add(error)
    return spread.floor(scales)
