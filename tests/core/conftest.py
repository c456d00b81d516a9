"""Hand-made trials for the pure part: no rig, no law."""

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from trialrunner.core.guards import GuardContext
from trialrunner.core.settings import InputChannel, OutputChannel
from trialrunner.core.trial import Purpose, Trial


@pytest.fixture
def move() -> np.ndarray:
    """(400, 1): rest, a smooth move of 10 mm out, rest, back, rest."""
    ramp = 5.0 * (1.0 - np.cos(np.pi * np.arange(80) / 79))
    rest, top = np.zeros(80), np.full(80, 10.0)
    return np.concatenate([rest, ramp, top, ramp[::-1], rest])[:, np.newaxis]


@pytest.fixture
def make_trial(move: np.ndarray) -> Callable[..., Trial]:
    """A healthy trial that follows `move` with a small lag and seeded noise; fields by keyword."""

    def make(seed: int = 1, **changes: Any) -> Trial:
        reference = changes.get("reference", move)
        rng = np.random.default_rng(seed)
        lagged = np.concatenate([reference[:1], reference[:1], reference])[:-2]
        values: dict[str, Any] = {
            "index": 0,
            "purpose": Purpose.LEARN,
            "feedforward": np.full((len(reference), 1), 0.1),
            "reference": reference,
            "output": lagged + 0.01 * rng.standard_normal(reference.shape),
            "auxiliary": np.zeros((len(reference), 1)),
            "limited": np.zeros((len(reference), 1), dtype=bool),
            "start_state": reference[0].copy(),
        }
        return Trial(**(values | changes))

    return make


@pytest.fixture
def make_context() -> Callable[..., GuardContext]:
    """The run around a trial; fields by keyword."""

    def make(n_samples: int = 400, **changes: Any) -> GuardContext:
        values: dict[str, Any] = {
            "period_s": 0.001,
            "inputs": (InputChannel(name="force", unit="N", low=-10.0, high=10.0),),
            "outputs": (
                OutputChannel(name="x", unit="mm", low=-50.0, high=50.0, start_tolerance=0.2),
            ),
            "clipped": np.zeros((n_samples, 1), dtype=bool),
            "error_norm": 1.0,
            "first_norm": math.nan,
            "best_norm": math.inf,
            "best_trial": -1,
            "recent_norms": (),
            "learning": True,
            "limits_rising": False,
        }
        return GuardContext(**(values | changes))

    return make
