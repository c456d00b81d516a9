"""Least-squares projection of one channel on box and rate limits, exact, by dynamic programming.

Let V_k(u) be the least cost of samples 0..k with sample k at u: convex and piecewise quadratic.
Its derivative is kept as two stacks of knots, left and right of its minimiser. The rate limit
moves the stacks apart by one rate each (a flat piece opens between them), the next sample adds
u - goal, and the new minimiser is found by walking from the flat piece; knots walked over change
stacks. Backwards, each sample is the old minimiser clipped to the rate about its successor.
"""

import numpy as np

from trialrunner.core.rate_limit import bands
from trialrunner.core.trial import Array


def project(goal: Array, lower: Array, upper: Array, rate: float) -> Array:
    """The signal within limits whose sum of squared distances from `goal` is least, (n_samples,).

    `lower` and `upper`, (n_samples,), must themselves keep `rate` per sample and leave room:
    lower <= upper. Exact up to rounding.

    Clipping a candidate to the two bands of `goal` (see rate_limit) brings it nearer and keeps it
    within limits, so the answer lies between them and equals `goal` where they meet. Only the
    stretches between are solved, each by itself, in about 3 us a sample.
    """
    out = np.clip(goal, lower, upper)
    below, above = bands(out, rate)
    open_edges = np.flatnonzero(np.diff(below < above, prepend=False, append=False))
    for start, stop in open_edges.reshape(-1, 2).tolist():
        part = slice(start, stop)
        out[part] = _solve(goal[part].tolist(), below[part].tolist(), above[part].tolist(), rate)
    return out


def _solve(goal: list[float], lower: list[float], upper: list[float], rate: float) -> list[float]:
    minimisers = _minimisers(goal, lower, upper, rate)
    out, following = [], minimisers[-1]
    for minimiser in reversed(minimisers):
        following = min(max(minimiser, following - rate), following + rate)
        out.append(following)
    return out[::-1]


class _Side:
    """Knots of the derivative on one side of the minimiser, nearest last.

    A knot is (position, slope beyond it, jump at it). The left side is stored mirrored, position
    times `sign`, so that outwards is upwards on both. Positions lack `shift` and slopes lack the
    number of samples so far: both grow for all knots alike.
    """

    def __init__(self, sign: float) -> None:
        self.sign = sign
        self.shift = 0.0
        self.knots: list[tuple[float, float, float]] = []

    def push(self, position: float, slope: float, jump: float, count: int) -> None:
        self.knots.append((self.sign * position - self.shift, slope - count, jump))


def _minimisers(
    goal: list[float], lower: list[float], upper: list[float], rate: float
) -> list[float]:
    left, right = _Side(-1.0), _Side(+1.0)
    minimisers: list[float] = []
    flat_low, flat_high = lower[0], upper[0]
    for count, (wanted, low, high) in enumerate(zip(goal, lower, upper, strict=True), start=1):
        if wanted < low or wanted < flat_low:
            best = _walk(left, right, wanted, flat_low, low, count)
        elif wanted > high or wanted > flat_high:
            best = _walk(right, left, wanted, flat_high, high, count)
        else:
            best = wanted
            left.push(best, 1.0, 0.0, count)
            right.push(best, 1.0, 0.0, count)
        minimisers.append(best)
        left.shift += rate
        right.shift += rate
        flat_low, flat_high = best - rate, best + rate
    return minimisers


def _walk(
    outer: _Side, inner: _Side, wanted: float, flat: float, bound: float, count: int
) -> float:
    """The new minimiser, sought outwards from the edge of the flat piece up to the bound."""
    sign, knots = outer.sign, outer.knots
    bound *= sign
    at, slope = min(sign * flat, bound), 1.0
    derivative = at - sign * wanted
    while True:
        knot = knots[-1][0] + outer.shift if knots else bound
        end = min(knot, bound)
        at_end = derivative + slope * (end - at)
        if at_end >= 0.0:  # the derivative crosses zero on this piece
            best = min(at - derivative / slope, end) * sign
            outer.push(best, slope, 0.0, count)
            inner.push(best, slope, 0.0, count)
            return best
        if knot >= bound:  # the bound is the minimiser; knots beyond it stay out of reach
            knots.clear()
            outer.push(bound * sign, 1.0, 0.0, count)
            inner.push(bound * sign, slope, -at_end, count)
            return bound * sign
        _, beyond, jump = knots.pop()
        beyond += count
        if at_end + jump >= 0.0:  # the derivative jumps over zero at this knot
            outer.push(end * sign, beyond, at_end + jump, count)
            inner.push(end * sign, slope, -at_end, count)
            return end * sign
        inner.push(end * sign, slope, jump, count)
        at, slope, derivative = end, beyond, at_end + jump
