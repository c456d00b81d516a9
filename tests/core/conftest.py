"""Hand-made trials for the pure part, and a bench to run the advancer on: no rig."""

import math
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import pytest

from trialrunner.core.advance import Advancer
from trialrunner.core.guards import GuardContext
from trialrunner.core.laws import LawContext
from trialrunner.core.laws.pd import PdSettings
from trialrunner.core.run_state import Carry, Outcome, Request, RunState
from trialrunner.core.settings import Horizon, InputChannel, OutputChannel, RunSettings
from trialrunner.core.trial import Array, Purpose, Trial


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


N = 60
"""Samples of the bench's trials."""

REFERENCE = (1.0 - np.cos(np.linspace(0.0, 2.0 * np.pi, N)))[:, np.newaxis]
CONTEXT = LawContext(
    period_s=0.01,
    n_samples=N,
    n_inputs=1,
    n_outputs=1,
    reference=REFERENCE,
    low=np.array([-5.0]),
    high=np.array([5.0]),
    rate_per_s=np.array([math.inf]),
)


def run_settings(**changes: Any) -> RunSettings:
    values: dict[str, Any] = {
        "horizon": Horizon(n_samples=N, period_s=0.01),
        "inputs": (
            InputChannel(
                name="force", unit="N", low=-5.0, high=5.0, pin_start=False, pin_end=False
            ),
        ),
        "outputs": (OutputChannel(name="x", unit="mm", low=-9.0, high=9.0, start_tolerance=0.1),),
        "law": PdSettings(proportional=0.5),
    }
    return RunSettings(**(values | changes))


@dataclass
class Bench:
    """A rig whose output is its input plus seeded noise, an advancer, and everything that was."""

    advancer: Advancer
    state: RunState
    carry: Carry
    noise: float = 0.001
    learned: list[Array] = field(default_factory=list)
    outcomes: list[Outcome] = field(default_factory=list)

    def trial(self, **changes: Any) -> Trial:
        rng = np.random.default_rng(self.state.trial)
        output = self.carry.feedforward + self.noise * rng.standard_normal((N, 1))
        trial = Trial(
            index=self.state.trial,
            purpose=self.state.purpose,
            feedforward=self.carry.feedforward,
            reference=REFERENCE,
            output=output + changes.pop("offset", 0.0),
            auxiliary=np.zeros((N, 0)),
            limited=np.zeros((N, 1), dtype=bool),
            start_state=np.zeros(1),
        )
        return replace(trial, **changes)

    def play(self, late: bool = False, **changes: Any) -> Outcome:
        """One trial; `offset` is added to the output, other changes are fields of the trial."""
        trial = self.trial(**changes)
        self.learned.append(self.carry.learned)
        outcome = self.advancer.advance(trial, self.state, self.carry, self.recall, late)
        self.state, self.carry = outcome.state, outcome.carry
        self.outcomes.append(outcome)
        return outcome

    def play_void(self, late: bool = False) -> Outcome:
        """A trial of which nothing arrived."""
        nothing = np.full((N, 1), np.nan)
        return self.play(late, output=nothing, finish="cut_short", count=0)

    def recall(self, trial: int) -> Array:
        return self.learned[trial]

    def request(self, kind: str, target: str = "") -> str:
        self.state, self.carry, sentence = self.advancer.apply_request(
            Request(kind, target), self.state, self.carry, self.recall
        )
        return sentence


@pytest.fixture(scope="session")
def bench() -> Callable[..., Bench]:
    """A new bench; fields of the run settings by keyword."""

    def make(**changes: Any) -> Bench:
        advancer = Advancer(run_settings(**changes), CONTEXT, "f4")
        return Bench(advancer, *advancer.begin())

    return make
