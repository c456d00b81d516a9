"""What a broken sensor looks like in one channel of one trial; pure, O(N), for `integrity`."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from trialrunner.core.scatter import MAD_TO_SIGMA
from trialrunner.core.trial import Array

Indices = NDArray[np.intp]

LOCAL_SAMPLES = 25
"""Neighbours on each side that say how rough a signal is around a suspected spike."""

MAX_SUSPECTS = 32
"""Largest peaks that are looked at closely; bounds the work on a noisy channel."""

MEDIAN_SAMPLES = 2048
"""Evenly spread samples are enough for the roughness of a whole trial; a median is slow."""

RESOLUTION_STEPS = 4.0
"""A reference that moves by less than this many steps of the sensor need not show."""


@dataclass(frozen=True)
class Stretch:
    """Samples `first` to `last` read the same value while the reference covered `travel`."""

    first: int
    last: int
    travel: float
    limit: float
    whole: bool
    """The output did not change once in the whole trial."""


@dataclass(frozen=True)
class Peak:
    """One sample that stands out by `height`; more than `limit` is not believed."""

    sample: int
    height: float
    limit: float


def resolution(output: Array) -> float:
    """Smallest change between two samples that is not zero, (n_samples,); 0 if there is none."""
    steps = np.abs(np.diff(output))
    steps = steps[steps > 0]
    return float(steps.min()) if steps.size else 0.0


def find_stuck(output: Array, reference: Array, share: float, min_samples: int) -> Stretch | None:
    """The stretch of exactly equal readings over which the reference covered most, if too much.

    Too much is more than `share` of the reference's whole range in at least `min_samples` samples
    in which it moved: a dwell never counts, nor does a start within a delay that is short against
    the move, nor a reference that moves by a few steps of a coarse sensor. A jump of the reference
    is one moving sample and so never counts either. Both arrays (n_samples,).
    """
    same = output[1:] == output[:-1]
    if share >= 1.0 or np.count_nonzero(same) < min_samples:
        return None
    starts = np.concatenate(([0], np.flatnonzero(~same) + 1))
    ends = np.append(starts[1:], output.size)
    whole = starts.size == 1
    long = ends - starts > min_samples
    if not long.any():
        return None
    starts, ends = starts[long], ends[long]
    moves = np.concatenate(([0], np.cumsum(reference[1:] != reference[:-1])))
    travel = _range_within(reference, starts, ends)
    travel[moves[ends - 1] - moves[starts] < min_samples] = 0.0
    limit = max(share * float(np.ptp(reference)), RESOLUTION_STEPS * resolution(output))
    k = int(np.argmax(travel))
    if not travel[k] > limit:
        return None
    return Stretch(int(starts[k]), int(ends[k]) - 1, float(travel[k]), limit, whole)


def _range_within(values: Array, starts: Indices, ends: Indices) -> Array:
    """Largest minus smallest value in each of the stretches [start, end), which are in order."""
    edges = np.stack([starts, ends], axis=1).ravel()
    # reduceat takes every second piece here: the others lie between the stretches.
    edges = edges[edges < values.size]
    top = np.maximum.reduceat(values, edges)[::2]
    return np.asarray(top - np.minimum.reduceat(values, edges)[::2])


def find_spike(output: Array, factor: float) -> Peak | None:
    """The largest sample that leaves its neighbours and comes back at once, if out of proportion.

    Its height is the smaller of the two opposite changes around it, less the larger of the next
    changes outwards, all against the slope between the samples two away; so a step, a corner, a
    reversal at speed and a vibration have none. It is compared with `factor` times the largest of:
    the sensor's step, the robust scale (MAD) of the second differences of the trial, and the same
    just before and just after. `output` (n_samples,).
    """
    if output.size < 5:
        return None
    change = np.diff(output)
    roughness = np.abs(np.diff(change))
    slope = 0.25 * (output[4:] - output[:-4])
    before, after = change[1:-2] - slope, change[2:-1] - slope
    around = np.maximum(np.abs(change[:-3] - slope), np.abs(change[3:] - slope))
    height = np.minimum(np.abs(before), np.abs(after)) - around
    height = np.where(np.signbit(before) != np.signbit(after), height, 0.0)
    sample = roughness[:: 1 + roughness.size // MEDIAN_SAMPLES]
    floor = max(resolution(output), MAD_TO_SIGMA * float(np.median(sample)))
    suspects = np.flatnonzero(height > factor * floor)
    for k in suspects[np.argsort(-height[suspects], kind="stable")][:MAX_SUSPECTS]:
        limit = factor * max(floor, _local_scale(roughness, int(k) + 2))
        if height[k] > limit:
            return Peak(int(k) + 2, float(height[k]), limit)
    return None


def _local_scale(roughness: Array, sample: int) -> float:
    """The rougher side of a sample; roughness[i] is centred on sample i + 1."""
    before = roughness[max(0, sample - 2 - LOCAL_SAMPLES) : sample - 2]
    after = roughness[sample + 1 : sample + 1 + LOCAL_SAMPLES]
    scales = [float(np.median(side)) for side in (before, after) if side.size]
    return MAD_TO_SIGMA * max(scales, default=0.0)


def find_jump(output: Array, limit: float) -> Peak | None:
    """The largest change between two consecutive samples, if above `limit`."""
    if output.size < 2:
        return None
    size = np.abs(np.diff(output))
    k = int(np.argmax(size))
    return Peak(k + 1, float(size[k]), limit) if size[k] > limit else None
