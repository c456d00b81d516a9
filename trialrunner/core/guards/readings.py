"""What a broken sensor looks like in one channel of one trial; pure, O(N), for `integrity`."""

from dataclasses import dataclass

import numpy as np

from trialrunner.core.guards import MAD_TO_SIGMA
from trialrunner.core.trial import Array

LOCAL_SAMPLES = 25
"""Neighbours on each side that say how rough a signal is around a suspected spike."""

MAX_SUSPECTS = 32
"""Largest peaks that are looked at closely; bounds the work on a noisy channel."""

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
    starts = np.concatenate(([0], np.flatnonzero(np.diff(output)) + 1))
    ends = np.append(starts[1:], output.size)
    if share >= 1.0 or (ends - starts).max() <= min_samples:
        return None
    moves = np.diff(reference, prepend=reference[0]) != 0
    moves[starts] = False  # the change into a stretch is not a change during it
    moving = np.add.reduceat(moves.astype(np.int64), starts)
    travel = np.maximum.reduceat(reference, starts) - np.minimum.reduceat(reference, starts)
    limit = max(share * float(np.ptp(reference)), RESOLUTION_STEPS * resolution(output))
    travel[moving < min_samples] = 0.0
    k = int(np.argmax(travel))
    if not travel[k] > limit:
        return None
    return Stretch(int(starts[k]), int(ends[k]) - 1, float(travel[k]), limit, starts.size == 1)


def find_spike(output: Array, factor: float) -> Peak | None:
    """The largest sample that leaves its neighbours and comes back at once, if out of proportion.

    Its height is the smaller of the two opposite changes around it, less the larger of the next
    changes outwards; so a step, a reversal at speed and a vibration have none. It is compared with
    `factor` times the largest of: the sensor's step, the robust scale (MAD) of the second
    differences of the trial, and the same just before and just after. `output` (n_samples,).
    """
    if output.size < 5:
        return None
    change = np.diff(output)
    roughness = np.abs(np.diff(change))
    size = np.abs(change)
    height = np.minimum(size[1:-2], size[2:-1]) - np.maximum(size[:-3], size[3:])
    height[np.signbit(change[1:-2]) == np.signbit(change[2:-1])] = 0.0
    floor = max(resolution(output), MAD_TO_SIGMA * float(np.median(roughness)))
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
