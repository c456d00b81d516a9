"""Control charts on a series of scores that are standard normal while nothing has changed; pure.

One-sided (growth only) and two-sided charts have different run lengths; every function says which
it means. Run lengths are mean numbers of trials until an alarm, exact up to quadrature: the
integral equation of the chart, solved at Gauss-Legendre nodes (Page 1954 for the CUSUM, Crowder
1987 for the EWMA).
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise
from statistics import median

import numpy as np

from trialrunner.core.scatter import MAD_TO_SIGMA
from trialrunner.core.trial import Array

NODES = 48
"""Quadrature nodes; 128 give the same to eight digits over the settings that can be chosen."""

HIGHEST_LIMIT = 60.0
"""Upper end of the search for a limit, in standard deviations."""

LIMIT_DECIMALS = 3
"""Limits are rounded up to these, so that no machine's arithmetic shows in a verdict."""

LOWEST_WEIGHT = 0.02
"""Smallest weight of an EWMA for which the nodes resolve the integral's kernel."""


def cusum_step(up: float, score: float, slack: float) -> float:
    """Next upper CUSUM, max(0, up + score - slack); for the lower one pass -score."""
    return max(0.0, up + score - slack)


def ewma_step(level: float, score: float, weight: float) -> float:
    """Next exponentially weighted mean; for the one-sided chart use `ewma_step_up`."""
    return weight * score + (1.0 - weight) * level


def ewma_step_up(level: float, score: float, weight: float) -> float:
    """The same, held at 0 from below, so that a fall gives no credit against a later growth."""
    return max(0.0, ewma_step(level, score, weight))


def ewma_sigma(weight: float) -> float:
    """Standard deviation that an EWMA of standard normal scores tends to."""
    return math.sqrt(weight / (2.0 - weight))


def cusum_run_length(slack: float, limit: float, shift: float = 0.0, start: float = 0.0) -> float:
    """Mean trials until the ONE-SIDED upper CUSUM exceeds `limit`; scores are N(shift, 1)."""
    return _run_length(
        lambda at, to: to + slack - at - shift, 1.0, (0.0, limit), start, barrier=True
    )


def two_sided(upper: float, lower: float) -> float:
    """Mean run length of two one-sided charts together: 1/ARL = 1/ARL+ + 1/ARL-.

    Exact for CUSUMs that start at zero (Lucas and Crosier 1982).
    """
    return 1.0 / (1.0 / upper + 1.0 / lower)


def ewma_run_length(weight: float, width: float, shift: float = 0.0) -> float:
    """Mean trials until the TWO-SIDED EWMA leaves +-width standard deviations of itself."""
    limit = width * ewma_sigma(weight)
    return _run_length(
        lambda at, to: (to - (1.0 - weight) * at) / weight - shift, weight, (-limit, limit), 0.0
    )


def ewma_up_run_length(weight: float, width: float, shift: float = 0.0) -> float:
    """Mean trials until the ONE-SIDED EWMA (`ewma_step_up`) exceeds width standard deviations."""
    limit = width * ewma_sigma(weight)
    return _run_length(
        lambda at, to: (to - (1.0 - weight) * at) / weight - shift,
        weight,
        (0.0, limit),
        0.0,
        barrier=True,
    )


def _run_length(
    score: Callable[[Array, Array], Array],
    weight: float,
    span: tuple[float, float],
    start: float,
    barrier: bool = False,
) -> float:
    """Solve L(s) = 1 + P(s -> barrier) L(barrier) + integral of L(x) density(s -> x) over the span.

    `score(at, to)` is the standardised score that moves the chart from `at` to `to`, `weight` the
    derivative of `to` by the score. With a barrier the lower end holds a lump of probability.
    """
    low, high = span
    nodes, weights = np.polynomial.legendre.leggauss(NODES)
    points = 0.5 * (high - low) * (nodes + 1.0) + low
    weights = 0.5 * (high - low) * weights
    if barrier:
        points, weights = np.append(points, low), np.append(weights, 0.0)
    at = np.append(points, start)[:, np.newaxis]
    moves = _density(score(at, points[np.newaxis, :])) * weights / weight
    if barrier:
        moves[:, -1] = _below(score(at[:, 0], np.array(low)))
    inside = np.linalg.solve(np.eye(points.size) - moves[:-1], np.ones(points.size))
    return float(1.0 + moves[-1] @ inside)


def _density(score: Array) -> Array:
    return np.asarray(np.exp(-0.5 * np.square(score)) / math.sqrt(2.0 * math.pi))


def _below(score: Array) -> Array:
    return np.array([0.5 * math.erfc(-one / math.sqrt(2.0)) for one in score.tolist()])


@lru_cache(maxsize=64)
def cusum_limit(slack: float, run_length: float) -> float:
    """Limit at which the ONE-SIDED CUSUM has this mean time between false alarms."""
    return _solve(lambda limit: cusum_run_length(slack, limit), run_length)


@lru_cache(maxsize=64)
def ewma_up_limit(weight: float, run_length: float) -> float:
    """Width, in the EWMA's own standard deviations, for this time; ONE-SIDED."""
    return _solve(lambda width: ewma_up_run_length(weight, width), run_length)


def per_chart(run_length: float, charts: int) -> float:
    """Run length that each of several charts needs, so that together they have `run_length`.

    Alarms of independent charts add up, so the times divide; charts that look at the same scores
    alarm together more often, which only makes false alarms rarer.
    """
    return run_length * max(charts, 1)


def _solve(run_length: Callable[[float], float], wanted: float) -> float:
    """False position on the logarithm of the run length, which is nearly straight in the limit."""
    low, high = 0.0, 1.0
    while run_length(high) < wanted and high < HIGHEST_LIMIT:
        low, high = high, 1.5 * high
    short, long = (math.log(run_length(end) / wanted) for end in (low, high))
    step = 10.0**-LIMIT_DECIMALS
    while high - low > step:
        guess = low + (high - low) * min(max(short / (short - long), 0.0), 1.0)
        # At least half a step from the ends, so that both of them close in.
        guess = min(max(guess, low + 0.5 * step), high - 0.5 * step)
        at = math.log(run_length(guess) / wanted)
        low, short, high, long = (guess, at, high, long) if at < 0 else (low, short, guess, at)
    return math.ceil(high / step) * step


@dataclass(frozen=True)
class Level:
    """What a series of norms varies about, and by how much; in natural logarithms."""

    centre: float
    spread: float
    n_trials: int

    def score(self, value: float) -> float:
        """Standard normal score of a new value, made smaller for how little is known.

        A median of n normal values has a variance of pi/2 of their mean's, and a MAD has the
        information of 0.37 as many degrees of freedom (Huber, Robust Statistics, from memory); so
        Student's t with that many makes the score.
        """
        from scipy.special import ndtri, stdtr

        distance = (value - self.centre) / (
            self.spread * math.sqrt(1.0 + 0.5 * math.pi / self.n_trials)
        )
        freedom = max(0.37 * (self.n_trials - 1), 1.0)
        tail = float(stdtr(freedom, -abs(distance)))
        return math.copysign(-float(ndtri(max(tail, 1e-300))), distance)


def robust_level(values: Sequence[float], least_spread: float) -> Level:
    """Median and MAD x 1.4826 of at least one value, oldest first.

    The MAD of the values above the median counts where it is larger: growth is judged on that side,
    and error norms are skewed. Where consecutive values go together, sums of them scatter more by
    sqrt((1 + r) / (1 - r)) with r their correlation (first-order autoregression). A spread smaller
    than `least_spread` is not believed.
    """
    centre = median(values)
    both = median(abs(value - centre) for value in values)
    above = median([value - centre for value in values if value >= centre])
    spread = MAD_TO_SIGMA * max(both, above)
    if spread > 0.0:
        r = _correlation([(value - centre) / spread for value in values])
        spread *= math.sqrt((1.0 + r) / (1.0 - r))
    return Level(centre, max(spread, least_spread), len(values))


def _correlation(scores: Sequence[float]) -> float:
    """Of each score with the one before it, between 0 and 0.8; beyond two a score counts as two."""
    kept = [min(max(score, -2.0), 2.0) for score in scores]
    squares = sum(score * score for score in kept)
    if squares == 0.0:
        return 0.0
    return min(max(sum(a * b for a, b in pairwise(kept)) / squares, 0.0), 0.8)
