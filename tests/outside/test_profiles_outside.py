"""Move times of the profiles against closed forms for time-optimal moves from rest to rest.

Common practice, no source; for orders 3 and 4 as in Lambrechts, Boerlage and Steinbuch 2005, from
memory. On a grid a move may take longer than the closed form, by at most a sample for each phase.
"""

import numpy as np
import pytest

from trialrunner.core.profiles import point_to_point

PERIOD_S = 1e-4


def move_time_s(distance: float, v: float, a: float, j: float = np.inf, s: float = np.inf) -> float:
    """From the last sample at rest to the first at the target."""
    reference = point_to_point(
        [[0.0], [distance]],
        velocity_limit_per_s=v,
        acceleration_limit_per_s2=a,
        jerk_limit_per_s3=j,
        snap_limit_per_s4=s,
        period_s=PERIOD_S,
        n_samples=60_000,
    )[:, 0]
    return float(np.argmax(reference == distance)) * PERIOD_S


@pytest.mark.parametrize(
    ("limits", "expected_s"),
    [
        # Second order, with and without a phase of constant velocity.
        ((1.0, 0.5, 4.0), 1.0 / 0.5 + 0.5 / 4.0),
        ((0.01, 0.5, 4.0), 2.0 * np.sqrt(0.01 / 4.0)),
        # Third order: all limits reached; constant jerk only; no constant acceleration.
        ((1.0, 0.5, 4.0, 80.0), 1.0 / 0.5 + 0.5 / 4.0 + 4.0 / 80.0),
        ((0.001, 9.0, 99.0, 80.0), 4.0 * (0.001 / (2.0 * 80.0)) ** (1.0 / 3.0)),
        ((1.0, 0.5, 99.0, 80.0), 1.0 / 0.5 + 2.0 * np.sqrt(0.5 / 80.0)),
        # Fourth order: all limits reached; constant snap only.
        (
            (1.0, 0.5, 4.0, 80.0, 8000.0),
            1.0 / 0.5 + 0.5 / 4.0 + 4.0 / 80.0 + 80.0 / 8000.0,
        ),
        ((0.001, 9.0, 99.0, 9999.0, 8000.0), 8.0 * (0.001 / (8.0 * 8000.0)) ** 0.25),
    ],
)
def test_a_move_takes_the_least_time_but_for_the_grid(
    limits: tuple[float, ...], expected_s: float
) -> None:
    """Never shorter than a few samples under the closed form (difference quotients straddle the
    corners, at most a sample for each order), never longer by more than a sample a phase."""
    took_s = move_time_s(*limits)
    assert expected_s - 4 * PERIOD_S <= took_s <= expected_s + 16 * PERIOD_S


def test_two_axes_take_the_time_of_the_slower_one() -> None:
    """With equal limits the longer move sets the time of both."""
    both = point_to_point(
        [[0.0, 0.0], [1.0, 0.25]],
        velocity_limit_per_s=0.5,
        acceleration_limit_per_s2=4.0,
        period_s=PERIOD_S,
        n_samples=60_000,
    )
    arrived = [int(np.argmax(both[:, axis] == target)) for axis, target in ((0, 1.0), (1, 0.25))]
    assert arrived[0] == arrived[1]
    assert arrived[0] * PERIOD_S == pytest.approx(1.0 / 0.5 + 0.5 / 4.0, abs=4 * PERIOD_S)
