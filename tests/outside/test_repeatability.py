"""Path repeatability against ISO 9283:1998 (formula from memory) on sets computed by hand."""

import math

import numpy as np
import pytest

from trialrunner.core.norms import path_repeatability


def test_a_hand_computed_set() -> None:
    """Three trials, two samples, two axes. Sample 0: points (0, 0), (6, 0), (0, 6) about (2, 2):
    distances sqrt(8), sqrt(20), sqrt(20). Sample 1: all at one point, so nothing there."""
    paths = np.array([[[0.0, 0.0], [1, 1]], [[6, 0], [1, 1]], [[0, 6], [1, 1]]])
    distances = [math.sqrt(8.0), math.sqrt(20.0), math.sqrt(20.0)]
    mean = sum(distances) / 3.0
    deviation = math.sqrt(sum((one - mean) ** 2 for one in distances) / 2.0)
    assert mean == pytest.approx(3.92423, abs=1e-5)
    assert deviation == pytest.approx(0.94900, abs=1e-5)
    assert path_repeatability(paths) == pytest.approx(mean + 3.0 * deviation, rel=1e-12)
    assert path_repeatability(paths) == pytest.approx(6.77122, abs=2e-5)


def test_trials_at_equal_distance_have_no_deviation() -> None:
    """Two trials 2 mm apart are each 1 mm from their mean: repeatability 1 mm, wherever the worst
    sample is and whatever the path itself does."""
    line = np.linspace(0.0, 300.0, 11)[:, np.newaxis]
    apart = np.zeros((11, 1))
    apart[7] = 1.0
    assert path_repeatability(np.stack([line - apart, line + apart])) == pytest.approx(1.0)


def test_it_needs_two_trials_and_no_particular_origin() -> None:
    paths = np.random.default_rng(1).standard_normal((5, 20, 3))
    assert math.isnan(path_repeatability(paths[:1]))
    moved = paths + np.array([10.0, -20.0, 5.0])
    assert path_repeatability(moved) == pytest.approx(path_repeatability(paths))
    assert path_repeatability(2.0 * paths) == pytest.approx(2.0 * path_repeatability(paths))
