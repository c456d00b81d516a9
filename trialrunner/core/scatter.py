"""How much the error norm differs from trial to trial by chance; pure.

At its repeatability floor a rig's error norm may scatter by a fifth or more from trial to trial,
far away from it by next to nothing. Limits on norms are widened by what is measured here, so that
the same settings serve both.
"""

import math
from collections.abc import Sequence
from itertools import pairwise
from statistics import median

MAD_TO_SIGMA = 1.4826
"""Median absolute deviation to standard deviation, for normal noise."""

SCATTER_TRIALS = 32
"""Last trials that are looked at."""

MIN_TRIALS = 5
"""With fewer the scatter counts as zero: a run starts far from its floor."""

MAX_SCATTER = 0.35
"""A larger scatter is not believed, so that it cannot switch a limit off."""


def log_scatter(norms: Sequence[float]) -> float:
    """Standard deviation of ln(norm) from trial to trial, oldest norm first; 0.1 is about 10 %.

    From the median of the absolute second differences, whose variance is six times that of the
    noise. A steady fall or growth has none in the logarithm, and a few outliers do not move it.
    """
    recent = norms[-SCATTER_TRIALS:]
    if len(recent) < MIN_TRIALS or min(recent) <= 0.0:
        return 0.0
    logs = [math.log(norm) for norm in recent]
    steps = [later - earlier for earlier, later in pairwise(logs)]
    bends = [abs(later - earlier) for earlier, later in pairwise(steps)]
    return min(MAD_TO_SIGMA * median(bends) / math.sqrt(6.0), MAX_SCATTER)


def allowance(norms: Sequence[float], deviations: float) -> float:
    """Factor, at least 1, that so many standard deviations of scatter make of a norm."""
    return math.exp(deviations * log_scatter(norms))
