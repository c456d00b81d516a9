"""Point-to-point references within limits."""

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from trialrunner.core.errors import SettingError
from trialrunner.core.profiles import point_to_point
from trialrunner.core.trial import Array

PERIOD_S = 0.001
NAMES = (
    "velocity_limit_per_s",
    "acceleration_limit_per_s2",
    "jerk_limit_per_s3",
    "snap_limit_per_s4",
)


@st.composite
def requests(draw: st.DrawFn) -> dict[str, Any]:
    """One to three axes, two to four waypoints, limits from none to very tight."""
    n_axes, n_points = draw(st.integers(1, 3)), draw(st.integers(2, 4))
    coordinate = st.sampled_from([0.0, 1e-4, 0.02, 0.3, -0.25, 0.7])
    waypoints = [[draw(coordinate) for _ in range(n_axes)] for _ in range(n_points)]
    choices = ([0.3, 1.0, 5.0], [1.0, 5.0, 100.0], [30.0, 1e3, math.inf], [1e3, 1e5, math.inf])
    limits = {
        name: [draw(st.sampled_from(values)) for _ in range(n_axes)]
        for name, values in zip(NAMES, choices, strict=True)
    }
    return {"waypoints": waypoints, "dwell_s": draw(st.sampled_from([0.0, 0.0205])), **limits}


def make(n_samples: int = 20_000, period_s: float = PERIOD_S, **request: Any) -> Array:
    return point_to_point(period_s=period_s, n_samples=n_samples, **request)


def largest_derivatives(reference: Array, period_s: float) -> list[Array]:
    """Largest difference quotients of orders 1 to 4, with rest before and after; (n_axes,) each."""
    rest = np.repeat(reference[:1], 4, axis=0)
    signal = np.vstack((rest, reference, np.repeat(reference[-1:], 4, axis=0)))
    peaks = []
    for _ in range(4):
        signal = np.diff(signal, axis=0) / period_s
        peaks.append(np.abs(signal).max(axis=0))
    return peaks


@settings(max_examples=100, deadline=None)
@given(requests())
def test_no_limit_is_exceeded_and_every_waypoint_is_met(request: dict[str, Any]) -> None:
    """Velocity to snap as difference quotients, up to the rounding of the positions themselves."""
    reference = make(**request)
    rounding = 8 * np.finfo(float).eps * np.abs(reference).max()
    peaks = largest_derivatives(reference, PERIOD_S)
    for order, (name, peak) in enumerate(zip(NAMES, peaks, strict=True), start=1):
        assert np.all(peak <= np.array(request[name]) * (1 + 1e-9) + rounding / PERIOD_S**order)
    at = 0
    for point in request["waypoints"]:
        found = np.flatnonzero(np.all(reference[at:] == point, axis=1))
        assert found.size
        at += int(found[0])
    assert np.array_equal(reference[0], request["waypoints"][0])
    assert np.array_equal(reference[-1], request["waypoints"][-1])


@settings(max_examples=50, deadline=None)
@given(requests())
def test_each_move_is_a_straight_line_without_turning_back(request: dict[str, Any]) -> None:
    """All axes share one shape, which only grows."""
    request["waypoints"] = request["waypoints"][:2]
    reference = make(**request)
    start, target = reference[0], reference[-1]
    way = target - start
    if not way.any():
        assert np.all(reference == start)
        return
    share = (reference - start) @ way / (way @ way)
    assert np.allclose(reference, start + share[:, None] * way, rtol=0, atol=1e-15)
    assert np.all(np.diff(share) >= -1e-15)


def test_the_way_back_mirrors_the_way_out() -> None:
    """A move and its return are the same shape."""
    limits = dict(zip(NAMES, (0.5, 5.0, 200.0, 2e4), strict=True))
    reference = make(waypoints=[[0.0], [0.3], [0.0]], dwell_s=(0.1, 0.05, 0.0), **limits)[:, 0]
    out = int(np.argmax(reference == 0.3))
    moving = np.flatnonzero(np.diff(reference))
    assert moving[0] == 100
    back_from = int(np.flatnonzero(reference == 0.3)[-1])
    assert back_from - out == 50
    length = out - 100
    forth = reference[100 : 101 + length]
    back = reference[back_from : back_from + 1 + length]
    assert np.allclose(forth + back, 0.3, rtol=0, atol=1e-15)


def test_each_waypoint_is_held_for_its_dwell() -> None:
    """Rounded up to whole samples; the rest of the trial holds the last."""
    reference = make(
        300, waypoints=[[0.0], [1.0]], velocity_limit_per_s=100.0, dwell_s=(0.0101, 0.02)
    )[:, 0]
    assert np.all(reference[:12] == 0.0)
    assert reference[12] > 0.0
    assert np.all(reference[21:] == 1.0)
    assert reference[20] < 1.0


@pytest.mark.parametrize(
    ("given", "order"),
    [({}, 2), ({"jerk_limit_per_s3": 1e3}, 3), ({"jerk_limit_per_s3": 1e3, NAMES[3]: 1e5}, 4)],
)
def test_infinite_limits_leave_a_profile_of_lower_order(
    given: dict[str, float], order: int
) -> None:
    """The derivative of the profile's order jumps within a sample, the ones below do not."""
    reference = make(
        waypoints=[[0.0], [0.5]],
        velocity_limit_per_s=1.0,
        acceleration_limit_per_s2=10.0,
        **given,
    )
    peaks = largest_derivatives(reference, PERIOD_S)
    jumps = [float(peaks[i + 1][0] * PERIOD_S / peaks[i][0]) for i in range(3)]
    assert [jump < 0.5 for jump in jumps] == [i < order - 1 for i in range(3)]


def test_a_profile_that_does_not_fit_says_how_long_it_needs() -> None:
    """The number in the text is enough, and one less is not."""
    request = {"waypoints": [[0.0], [1.0]], "velocity_limit_per_s": 1.0, "dwell_s": 0.1}
    with pytest.raises(SettingError, match=r"need 1201 samples \(1.201 s\), the trial has 1200"):
        make(1200, **request)
    assert make(1201, **request)[-1, 0] == 1.0


def test_a_very_long_move_still_fits_its_whole_numbers() -> None:
    """Three hundred thousand samples a move: beyond 64-bit whole numbers, still monotone."""
    limits = dict(zip(NAMES, (9e-3, 1.2e-4, 3e-6, 1.2e-7), strict=True))
    reference = make(400_000, waypoints=[[0.0], [1.0]], **limits)[:, 0]
    assert reference[-1] == 1.0
    assert np.all(np.diff(reference) >= 0.0)
    assert np.diff(reference).max() / PERIOD_S <= 9e-3


Call = Callable[[], Array]


@pytest.mark.parametrize(
    ("call", "text"),
    [
        (lambda: make(waypoints=[], velocity_limit_per_s=1.0), "reference.waypoints"),
        (
            lambda: make(waypoints=[[0.0, 0.0]], velocity_limit_per_s=[1.0, 1.0, 1.0]),
            r"reference.velocity_limit_per_s: expected one number, or one for each of the 2 axes",
        ),
        (
            lambda: make(waypoints=[[0.0]], velocity_limit_per_s=1.0, dwell_s=[0.0, 0.0]),
            "reference.dwell_s: expected one number, or one for each of the 1 waypoints",
        ),
    ],
)
def test_lists_that_do_not_fit_are_refused(call: Call, text: str) -> None:
    """The text names the setting."""
    with pytest.raises(SettingError, match=text):
        call()
