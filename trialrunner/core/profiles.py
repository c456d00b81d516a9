"""Point-to-point references with limits on velocity, acceleration, jerk and snap.

A move is a step smoothed by four moving averages of n1 to n4 samples, shortest last. A moving
average of n samples divides the peak of the next derivative by n periods. So with distance d and
period T the peaks are d/(n1 T) in velocity, d/(n1 n2 T^2) in acceleration, d/(n1 n2 n3 T^3) in jerk
and d/(n1 n2 n3 n4 T^4) in snap, provided that jumps of one sign do not meet: n2 >= n3 + n4 and
n1 >= n2 + n3 + n4 - 1. Derivatives are difference quotients of the samples, which is what a rig
fed with them sees.

The four counts follow the usual fourth-order plan (Lambrechts, Boerlage and Steinbuch 2005, from
memory): constant snap as short as one of the limits allows, then constant jerk, constant
acceleration and constant velocity. Each is rounded up to a whole sample before the next is planned,
so limits always hold, and a move takes a few samples more than the shortest one without a grid. An
infinite snap limit leaves a third-order profile, an infinite jerk limit too a second-order one.

All axes share one shape, so that a move is a straight line; the axis that is slowest in each
derivative sets it.
"""

import math
from bisect import bisect_left
from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from trialrunner.core.errors import SettingError
from trialrunner.core.trial import Array

LONGEST = 2**40
"""Samples above which a phase is not sought any further; far beyond any trial."""

ROUNDING = 1e-12
"""A duration that exceeds a whole number of samples by less than this share is that number."""


def point_to_point(
    waypoints: ArrayLike,
    *,
    velocity_limit_per_s: ArrayLike,
    acceleration_limit_per_s2: ArrayLike = math.inf,
    jerk_limit_per_s3: ArrayLike = math.inf,
    snap_limit_per_s4: ArrayLike = math.inf,
    dwell_s: ArrayLike = 0.0,
    period_s: float,
    n_samples: int,
) -> Array:
    """The reference, (n_samples, n_axes): from waypoint to waypoint, at rest at each, then held.

    `waypoints`: (n_points, n_axes); sample 0 is the first, and each is met to the last bit. Limits:
    one number or (n_axes,), in the axes' units, infinite for none. `dwell_s`: rest at each
    waypoint, the first and the last included; one number or (n_points,); between two moves at least
    as many samples as keep their derivatives apart, up to 3. Raises SettingError if lists do not
    fit each other, or if the moves need more than `n_samples`; the text says how many.
    """
    points = np.asarray(waypoints, dtype=np.float64)
    if points.ndim != 2 or points.size == 0 or not np.all(np.isfinite(points)):
        raise SettingError(
            "reference.waypoints: expected a list of points with one finite coordinate an axis, "
            f"found {points.tolist()}"
        )
    n_points, n_axes = points.shape
    limits = np.array(
        [
            _spread("velocity_limit_per_s", velocity_limit_per_s, n_axes, "axes"),
            _spread("acceleration_limit_per_s2", acceleration_limit_per_s2, n_axes, "axes"),
            _spread("jerk_limit_per_s3", jerk_limit_per_s3, n_axes, "axes"),
            _spread("snap_limit_per_s4", snap_limit_per_s4, n_axes, "axes"),
        ]
    )
    rests = _spread("dwell_s", dwell_s, n_points, "waypoints") / period_s
    dwells = _dwells(rests, limits)
    plans = [_plan(np.abs(step), limits, period_s) for step in np.diff(points, axis=0)]
    needed = 1 + sum(dwells) + sum(_length(plan) for plan in plans)
    if needed > n_samples:
        raise SettingError(
            f"reference.waypoints: the moves and dwells need {needed} samples "
            f"({needed * period_s:g} s), the trial has {n_samples} ({n_samples * period_s:g} s); "
            "make the trial longer or raise the limits"
        )
    return _assemble(points, plans, dwells, n_samples)


def _dwells(rests: Array, limits: Array) -> list[int]:
    """Whole samples of rest at each waypoint, from rests in samples."""
    dwells = [math.ceil(rest * (1.0 - ROUNDING)) for rest in rests.tolist()]
    # A derivative of order n looks n samples back: without this rest, the end of a move and the
    # beginning of the next one would add up in it.
    order = int(np.flatnonzero(np.isfinite(limits).any(axis=1)).max(initial=-1)) + 1
    return [dwells[0], *(max(dwell, order - 1) for dwell in dwells[1:-1]), *dwells[1:][-1:]]


def _spread(key: str, value: ArrayLike, count: int, what: str) -> Array:
    array = np.asarray(value, dtype=np.float64)
    if array.shape not in ((), (count,)):
        raise SettingError(
            f"reference.{key}: expected one number, or one for each of the {count} {what}, "
            f"found an array of shape {array.shape}"
        )
    return np.broadcast_to(array, (count,))


def _assemble(
    points: Array, plans: list[tuple[int, ...]], dwells: list[int], n_samples: int
) -> Array:
    reference = np.empty((n_samples, points.shape[1]))
    at = 1 + dwells[0]
    reference[:at] = points[0]
    for start, target, plan, dwell in zip(points, points[1:], plans, dwells[1:], strict=False):
        share = _shape(plan)[:, np.newaxis]
        # Written as a blend, so that both ends are met to the last bit.
        reference[at : at + len(share)] = (1.0 - share) * start + share * target
        at += len(share)
        reference[at : at + dwell] = target
        at += dwell
    reference[at:] = points[-1]
    return reference


def _plan(distance: Array, limits: Array, period_s: float) -> tuple[int, ...]:
    """Samples of the four averages for a straight move; empty if there is nowhere to go.

    `distance`: (n_axes,), not negative; `limits`: (4, n_axes), velocity to snap.
    """
    moving = distance > 0.0
    if not moving.any():
        return ()
    powers = period_s ** np.arange(1, 5)
    with np.errstate(over="ignore"):  # next to no distance: no limit
        shares = np.min(limits[:, moving] / distance[moving], axis=1)
    velocity, acceleration, jerk, snap = (shares * powers).tolist()
    return _counts(velocity, acceleration, jerk, snap)


def _counts(v: float, a: float, j: float, s: float) -> tuple[int, int, int, int]:
    """Samples of the averages n1 to n4 for a move of 1 with limits per sample."""
    n4 = _first(1, lambda n: s * n >= j or s * n**2 >= a or 2 * s * n**3 >= v or 8 * s * n**4 >= 1)
    # What the averages before need of room, zero for those that are not there.
    room4 = n4 if math.isfinite(s) else 0
    j = min(j, s * n4)
    n3 = _first(
        n4,
        lambda n: j * n >= a or j * n * (n + room4) >= v or 2 * j * n * (n + room4) ** 2 >= 1,
    )
    room3 = n3 + room4 if math.isfinite(j) else 0
    a = min(a, j * n3)
    n2 = _first(max(room3, 1), lambda n: a * n >= v or a * n * (n + room3) >= 1)
    v = min(v, a * n2)
    n1 = _first(max(n2 + (n3 + n4 - 1 if room3 else 0), 1), lambda n: v * n >= 1)
    return n1, n2, n3, n4


def _first(least: int, enough: Callable[[float], bool]) -> int:
    """The smallest count from `least` on that is enough, but for rounding."""
    return least + bisect_left(
        range(least, LONGEST), True, key=lambda n: enough(n * (1.0 + ROUNDING))
    )


def _length(plan: tuple[int, ...]) -> int:
    """Samples from the last one at rest to the first one at the target."""
    return sum(plan) - len(plan) + 1 if plan else 0


def _shape(plan: tuple[int, ...]) -> Array:
    """Share of the way done, (length,), ending at 1: running sums of whole numbers, so exact."""
    if not plan:
        return np.empty(0)
    total = math.prod(plan)
    # Beyond 2^62 in floating point: rounding of 1e-13 of the way over 200,000 samples and more.
    pulse: NDArray[Any] = np.ones(plan[0], dtype=np.int64 if total < 2**62 else np.float64)
    for count in plan[1:]:
        sums = np.cumsum(np.concatenate((pulse, np.zeros(count - 1, dtype=pulse.dtype))))
        sums[count:] -= sums[:-count].copy()
        pulse = sums
    return np.asarray(np.minimum(np.cumsum(pulse) / float(total), 1.0))
