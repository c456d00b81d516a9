"""Two ways to bring a signal within a rate: the sequential clamp and the envelope.

Both take one channel, (n_samples,), that already lies within bounds which themselves keep the
rate; then so does the result. Neither allocates more than a few arrays of that length.
"""

import math

import numpy as np
from numpy.typing import NDArray

from trialrunner.core.trial import Array

BUSY_SHARE = 0.05
"""Share of samples beyond the rate above which one plain loop beats walking stretch by stretch."""

FIRST_WALK = 64
"""Samples of the first piece of a limited stretch; doubled until the stretch ends."""


def clamp_rate(goal: Array, rate: float) -> Array:
    """Follows `goal` as closely as `rate` per sample allows, past to future; (n_samples,).

    u[k] = clip(goal[k], u[k-1] - rate, u[k-1] + rate). Only stretches where that binds are walked;
    the bits are those of the plain loop. O(n).
    """
    too_fast = np.flatnonzero(np.abs(np.diff(goal)) > rate) + 1
    out = goal.copy()
    if too_fast.size > BUSY_SHARE * goal.size:
        out[1:] = _walk(goal[1:].tolist(), float(goal[0]), rate)
        return out
    done, n_samples = 0, len(goal)
    for start in too_fast.tolist():
        if start >= done:
            done = _walk_stretch(out, start, rate, n_samples)
    return out


def _walk_stretch(out: Array, start: int, rate: float, n_samples: int) -> int:
    """Limits `out` from `start` until it meets its goal again; returns the index after that."""
    length = FIRST_WALK
    while start < n_samples:
        piece = out[start : start + length].tolist()
        limited = _walk(piece, float(out[start - 1]), rate, stop=True)
        out[start : start + len(limited)] = limited
        start += len(limited)
        if len(limited) < len(piece) or limited[-1] == piece[-1]:
            break
        length *= 2
    return start


def _walk(goal: list[float], last: float, rate: float, stop: bool = False) -> list[float]:
    """The plain loop. With `stop` it ends at the first sample that reaches its goal."""
    limited = []
    for wanted in goal:
        change = wanted - last
        if change > rate:
            last += rate
        elif change < -rate:
            last -= rate
        else:
            last = wanted
            if stop:
                limited.append(last)
                break
        limited.append(last)
    return limited


def bands(goal: Array, rate: float) -> tuple[Array, Array]:
    """The largest signal below `goal` and the smallest above it that keep `rate`.

    Exact where goal and rate are whole numbers with |goal| + 2 rate n < 2^53, else up to rounding.
    """
    ramp: Array = rate * np.arange(len(goal), dtype=np.float64)
    return _largest_below(goal, ramp), -_largest_below(-goal, ramp)


def envelope(goal: Array, rate: float) -> Array:
    """The mean of the two bands, (n_samples,), O(n).

    No signal within the rate has a smaller largest distance from `goal`, and none is delayed: a
    ramp is centred on the step that it replaces.
    """
    below, above = bands(goal, rate)
    return (below + above) / 2.0


def envelope_where_needed(goal: Array, rate: float) -> Array:
    """`envelope`, computed only around the samples at which `goal` breaks the rate.

    A sample further than 2 max|goal| / rate from every break is its own envelope: reaching another
    one within the rate would take longer. So windows of twice that reach round the breaks give the
    same values, and a signal that is cut at its ends alone costs next to nothing.
    """
    broken = np.flatnonzero(np.abs(np.diff(goal)) > rate)
    if broken.size == 0:
        return goal
    size = float(np.max(np.abs(goal)))
    if broken.size > MOST_BREAKS or not 4.0 * size < rate * len(goal):
        return envelope(goal, rate)
    reach = 2 * (math.ceil(2.0 * size / rate) + 1)
    limited = goal.copy()
    for start, end in _windows(broken, reach, len(goal)):
        limited[start:end] = envelope(goal[start:end], rate)
    return limited


MOST_BREAKS = 200
"""Beyond so many breaks the windows cost more than the whole signal at once."""


def _windows(broken: NDArray[np.intp], reach: int, n_samples: int) -> list[tuple[int, int]]:
    """Stretches of samples within `reach` of a break, merged where they touch."""
    merged: list[tuple[int, int]] = []
    for k in broken.tolist():
        start, end = max(0, k - reach), min(n_samples, k + reach + 2)
        if merged and start <= merged[-1][1]:
            start = merged.pop()[0]
        merged.append((start, end))
    return merged


def _largest_below(goal: Array, ramp: Array) -> Array:
    """min over j of goal[j] + rate |k - j|, as one running minimum each way."""
    forwards = np.minimum.accumulate(goal - ramp) + ramp
    backwards = np.minimum.accumulate((forwards + ramp)[::-1])[::-1]
    return np.asarray(backwards - ramp)
