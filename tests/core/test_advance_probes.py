"""Probe trials of a law that makes experiments, and whatever happens in whatever order."""

import functools
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from trialrunner.core.guards.divergence import Divergence
from trialrunner.core.laws import LawContext, Step
from trialrunner.core.settings import LadderSettings, StopSettings
from trialrunner.core.trial import Purpose, Trial

Make = Callable[..., Any]

N = 60
"""Samples of a trial on the bench."""


@dataclass(frozen=True)
class ProbingSettings:
    """A law that plays its own experiment after each learning trial."""

    kind: str = "probing"

    def build(self, context: LawContext) -> "Probing":
        return Probing()


class Probing:
    def update(self, trial: Trial, gain: float, memory: Any, arrays: Any) -> Step:
        if trial.purpose is Purpose.PROBE:
            step = arrays["base"] + gain * 0.5 * arrays["error"]
            return Step(step, memory={"probes": memory["probes"]})
        probes = int(memory.get("probes", 0)) + 1
        kept = {"base": trial.feedforward, "error": trial.error}
        return Step(trial.feedforward + 1.0, Purpose.PROBE, {"probes": probes}, kept)


@pytest.fixture(scope="session")
def probing(bench: Make) -> Make:
    """A bench with that law; fields of the run settings by keyword."""
    return functools.partial(bench, law=ProbingSettings())


def test_probe_trials_are_played_and_learned_from(probing: Make) -> None:
    """Learn, probe, learn, probe: the learned feedforward moves on after each probe only."""
    rig = probing()
    purposes = []
    for _ in range(12):
        purposes.append(rig.state.purpose)
        rig.play()
    assert purposes == [Purpose.LEARN, Purpose.PROBE] * 6
    assert rig.state.best_norm < 0.1 * rig.state.first_norm
    assert rig.state.best_trial == 10, "probes are never best"


def test_a_void_probe_is_played_again(probing: Make) -> None:
    """With the same experiment."""
    rig = probing()
    rig.play()
    probe = rig.carry.feedforward
    rig.play_void()
    assert rig.state.purpose is Purpose.PROBE
    assert rig.carry.feedforward is probe


def test_a_freeze_during_a_probe_returns_to_the_learned_feedforward(probing: Make) -> None:
    """And the law starts anew when learning goes on."""
    rig = probing()
    for _ in range(3):
        rig.play()
    learned = rig.carry.learned
    rig.request("freeze")
    assert rig.play().action == "repeat"
    assert rig.carry.feedforward is learned
    assert rig.state.purpose is Purpose.LEARN
    assert "law" not in rig.state.memories
    rig.request("learn")
    assert rig.play().state.purpose is Purpose.PROBE


@pytest.mark.parametrize("floor_trials", [0, 2])
def test_a_run_that_ends_on_a_probe_ends_with_the_learned_feedforward(
    probing: Make, floor_trials: int
) -> None:
    """The experiment is no result."""
    rig = probing(stop=StopSettings(trials=4, floor_trials=floor_trials))
    for _ in range(3):
        rig.play()
    learned = rig.carry.learned
    rig.play()
    assert rig.carry.feedforward is learned
    assert bool(rig.state.over) is (floor_trials == 0)


def test_a_probe_that_halts_is_not_played_again(probing: Make) -> None:
    """After resume the learned feedforward is played."""
    rig = probing(guards={"divergence": Divergence(peak_limits={"x": 4.0})})
    rig.play()
    learned = rig.carry.learned
    assert rig.play(offset=9.0 - 1.0 - 0.1).action == "halt"
    rig.request("resume")
    assert rig.state.purpose is Purpose.LEARN
    assert rig.carry.feedforward is learned


@settings(max_examples=60, deadline=None)
@given(
    plan=st.lists(
        st.sampled_from(
            ["ok", "ok", "ok", "off", "far", "void", "late", "freeze", "learn", "rollback"]
        ),
        max_size=40,
    ),
    probes=st.booleans(),
)
def test_void_and_frozen_trials_never_change_the_feedforward(
    bench: Make, probing: Make, plan: list[str], probes: bool
) -> None:
    """Whatever happens in whatever order; and a roll back restores bits, and voids never teach."""
    rig = (probing if probes else bench)(
        ladder=LadderSettings(max_voids_in_row=50, max_roll_backs=2, confirm_ratio=1e9)
    )
    for what in plan:
        if rig.state.halted:
            break
        before, carry = rig.state, rig.carry
        if what in ("freeze", "learn"):
            rig.request(what)
            continue
        if what == "rollback":
            if before.updates:
                rig.request("rollback", "best")
            continue
        offset = {"off": 0.3, "far": 3.0}.get(what, 0.0)
        outcome = rig.play_void() if what == "void" else rig.play(what == "late", offset=offset)
        played = carry.feedforward
        if what == "void":
            assert outcome.void
            assert rig.carry is carry
        if outcome.action in ("repeat", "halt") and before.purpose is not Purpose.PROBE:
            assert rig.carry.feedforward is played
            assert rig.carry.learned is carry.learned
        if not before.learning and outcome.action != "recall":
            assert rig.carry.learned is carry.learned
            expected = played if outcome.void else carry.learned
            assert np.array_equal(rig.carry.feedforward, expected)
        if outcome.action == "learn":
            assert before.learning
            assert not outcome.void
        if outcome.action == "recall":
            assert any(rig.carry.feedforward is old for old in rig.learned)
        assert rig.state.roll_backs <= 2
