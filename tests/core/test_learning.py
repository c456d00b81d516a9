"""Averaging, masks, forgetting, filter and limits around a law."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pytest

from trialrunner.core.errors import CoreError, ShapeError
from trialrunner.core.laws import LawContext, Step
from trialrunner.core.laws.pd import PdSettings
from trialrunner.core.learning import Learned, Learner
from trialrunner.core.run_state import Carry, RunState
from trialrunner.core.settings import (
    FilterSettings,
    Horizon,
    InputChannel,
    LearnSettings,
    OutputChannel,
    RunSettings,
)
from trialrunner.core.trial import Array, Mask, Memory, Purpose, Trial

N = 64
PERIOD_S = 0.01


@dataclass(frozen=True)
class Probing:
    """A law that asks for an experiment after each learning trial, and keeps notes."""

    kind: str = "probing"

    def build(self, context: LawContext) -> "Probing":
        return self

    def update(
        self, trial: Trial, gain: float, memory: Memory, arrays: Mapping[str, Array]
    ) -> Step:
        count = int(memory.get("count", 0)) + 1  # type: ignore[arg-type]
        if trial.purpose is Purpose.LEARN:
            assert not arrays
            return Step(
                trial.feedforward + 0.25, Purpose.PROBE, {"count": count}, {"base": trial.error}
            )
        learned = trial.feedforward - 0.25
        return Step(learned + gain * arrays["base"], Purpose.LEARN, {"count": count})


Make = Callable[..., Learner]


@pytest.fixture
def make_learner() -> Make:
    """A learner of one input and one output: P law of gain 0.5, no filter, box -1..1, no pins."""

    def make(law: Any = None, sample_type: str = "f8", **learn: Any) -> Learner:
        channel = {
            key: learn.pop(key)
            for key in ("rate_limit_per_s", "change_cap", "pin_start", "pin_end")
            if key in learn
        }
        pins = {"pin_start": False, "pin_end": False}
        chosen = RunSettings(
            horizon=Horizon(n_samples=N, period_s=PERIOD_S),
            inputs=(
                InputChannel(name="force", unit="N", low=-1.0, high=1.0, **{**pins, **channel}),
            ),
            outputs=(OutputChannel(name="position", unit="mm", low=-9.0, high=9.0),),
            law=law or PdSettings(proportional=0.5),
            filter=learn.pop("filter", FilterSettings(shape="none")),
            learn=LearnSettings(**learn),
        )
        context = LawContext(
            period_s=PERIOD_S,
            n_samples=N,
            n_inputs=1,
            n_outputs=1,
            reference=np.zeros((N, 1)),
            low=np.array([-1.0]),
            high=np.array([1.0]),
            rate_per_s=np.array([chosen.inputs[0].rate_limit_per_s]),
        )
        return Learner(chosen, context, sample_type)

    return make


def trial_with(
    error: Array, carry: Carry, limited: Mask | None = None, purpose: Purpose = Purpose.LEARN
) -> Trial:
    """A trial that played the carry's feedforward and left the given error."""
    return Trial(
        index=7,
        purpose=purpose,
        feedforward=carry.feedforward,
        reference=np.zeros((N, 1)),
        output=-error,
        auxiliary=np.zeros((N, 0)),
        limited=np.zeros((N, 1), dtype=bool) if limited is None else limited,
        start_state=np.zeros(1),
    )


def started(learner: Learner, initial: Array | None = None) -> Carry:
    first = learner.first_feedforward(initial)
    zeros = Carry.zeros(N, 1, 1)
    return replace(
        zeros, feedforward=first.feedforward, clipped=first.clipped, learned=first.feedforward
    )


def noise(seed: int, size: float = 0.1) -> Array:
    return size * np.random.default_rng(seed).normal(size=(N, 1))


def following(state: RunState, learned: Learned) -> RunState:
    """The state as the caller keeps it."""
    return replace(
        state,
        averaged=learned.averaged,
        updates=state.updates + learned.updated,
        purpose=learned.purpose,
        memories={"law": learned.memory},
    )


def test_one_trial_makes_one_update(make_learner: Make) -> None:
    """u' = u + 0.5 e, from what was sent."""
    learner = make_learner()
    carry = started(learner, noise(1))
    learned = learner.learn(trial_with(noise(2), carry), RunState(), carry)
    assert learned.updated
    assert learned.averaged == 0
    assert learned.clipped_share == 0.0
    expected = carry.feedforward + 0.5 * noise(2)
    assert np.allclose(learned.carry.feedforward, expected, rtol=0, atol=1e-15)
    assert learned.carry.learned is learned.carry.feedforward


def test_the_gain_of_the_state_scales_the_law(make_learner: Make) -> None:
    """A guard's reduced gain reaches the law."""
    learner = make_learner()
    carry = started(learner)
    learned = learner.learn(trial_with(noise(2), carry), RunState(gain=0.1), carry)
    assert np.allclose(learned.carry.feedforward, 0.05 * noise(2), rtol=0, atol=1e-16)


def test_nothing_changes_until_enough_trials_were_averaged(make_learner: Make) -> None:
    """The same feedforward is repeated, then the mean error makes one update, then anew."""
    learner = make_learner(average_trials=3)
    state, carry = RunState(), started(learner, noise(1))
    first = carry.feedforward
    for round_, errors in enumerate(([2, 3, 4], [5, 6, 7])):
        for count, seed in enumerate(errors, start=1):
            learned = learner.learn(trial_with(noise(seed), carry), state, carry)
            state, carry = following(state, learned), learned.carry
            assert learned.updated == (count == 3)
            if not learned.updated:
                assert np.array_equal(carry.feedforward, first)
                assert state.averaged == count
        mean = np.mean([noise(seed) for seed in errors], axis=0)
        assert np.allclose(carry.feedforward, first + 0.5 * mean, rtol=0, atol=1e-15)
        assert state.updates == round_ + 1
        first = carry.feedforward


def test_where_the_rig_was_limited_nothing_is_learned(make_learner: Make) -> None:
    """Those samples keep their feedforward; the others learn."""
    learner = make_learner()
    carry = started(learner, noise(1))
    limited = np.zeros((N, 1), dtype=bool)
    limited[10:20] = True
    after = learner.learn(trial_with(noise(2), carry, limited), RunState(), carry).carry.feedforward
    assert np.array_equal(after[limited], carry.feedforward[limited])
    assert np.all(after[~limited] != carry.feedforward[~limited])


def test_a_sample_limited_in_any_averaged_trial_learns_nothing(make_learner: Make) -> None:
    """Also if the last of them was not limited there; the next average starts without it."""
    learner = make_learner(average_trials=2)
    state, carry = RunState(), started(learner)
    limited = np.zeros((N, 1), dtype=bool)
    limited[5] = True
    for mask in (limited, None):
        learned = learner.learn(trial_with(noise(3), carry, mask), state, carry)
        state, carry = following(state, learned), learned.carry
    assert np.flatnonzero(carry.feedforward == 0.0).tolist() == [5]
    for _ in range(2):
        learned = learner.learn(trial_with(noise(3), carry), state, carry)
        state, carry = following(state, learned), learned.carry
    assert np.all(carry.feedforward != 0.0)


def test_going_further_out_of_the_box_is_stopped_coming_back_is_not(make_learner: Make) -> None:
    """Without it, a filter would carry the cut wish into the neighbours."""
    q_filter = FilterSettings(bandwidth_hz=5.0)
    learner = make_learner(filter=q_filter)
    at_limit = np.zeros((N, 1))
    at_limit[20:40] = 1.0
    clipped = at_limit > 0.0
    carry = replace(Carry.zeros(N, 1, 1), feedforward=at_limit, learned=at_limit, clipped=clipped)
    push = np.zeros((N, 1))
    push[30] = 4.0
    pushed = learner.learn(trial_with(push, carry), RunState(), carry).carry.feedforward
    rest = learner.learn(trial_with(0 * push, carry), RunState(), carry).carry.feedforward
    pulled = learner.learn(trial_with(-push, carry), RunState(), carry).carry.feedforward
    assert np.array_equal(pushed, rest)
    assert pulled[30, 0] < rest[30, 0]
    free = replace(carry, clipped=np.zeros((N, 1), dtype=bool))
    unmasked = learner.learn(trial_with(push, free), RunState(), free).carry.feedforward
    assert unmasked[41, 0] > rest[41, 0]


def test_forgetting_takes_its_share_of_what_was_sent(make_learner: Make) -> None:
    """u' = 0.9 u + 0.5 e, also where a limit stops learning."""
    learner = make_learner(forgetting=0.1)
    carry = started(learner, noise(1))
    limited = np.zeros((N, 1), dtype=bool)
    limited[3] = True
    after = learner.learn(trial_with(noise(2), carry, limited), RunState(), carry).carry.feedforward
    expected = 0.9 * carry.feedforward + 0.5 * np.where(limited, 0.0, noise(2))
    assert np.allclose(after, expected, rtol=0, atol=1e-15)


def test_the_filter_smooths_what_was_sent_and_what_was_learned_alike(make_learner: Make) -> None:
    """Q acts on u + L e, so a wish beyond its bandwidth dies out."""
    learner = make_learner(filter=FilterSettings(bandwidth_hz=1.0))
    fastest = 0.5 * np.cos(np.pi * (N - 1) * (np.arange(N) + 0.5) / N)[:, None]
    carry = started(learner, fastest)
    after = learner.learn(trial_with(fastest, carry), RunState(), carry).carry.feedforward
    assert np.abs(after).max() < 1e-12


def test_the_soft_start_raises_the_allowed_feedforward(make_learner: Make) -> None:
    """From a quarter of the box to all of it, in even steps of the updates made."""
    learner = make_learner(soft_start_trials=3, soft_start_fraction=0.25)
    state, carry = RunState(), started(learner, np.ones((N, 1)))
    peaks = [carry.feedforward.max()]
    for _ in range(4):
        learned = learner.learn(trial_with(np.full((N, 1), 9.0), carry), state, carry)
        state, carry = following(state, learned), learned.carry
        peaks.append(carry.feedforward.max())
    assert np.allclose(peaks, [0.25, 0.5, 0.75, 1.0, 1.0], atol=1e-9)


def test_the_first_feedforward_is_zero_or_the_given_one_within_limits(make_learner: Make) -> None:
    """Quantised to the wire; pins and box hold from the first trial on."""
    learner = make_learner(sample_type="f4", pin_start=True, pin_end=True)
    assert not learner.first_feedforward().feedforward.any()
    first = learner.first_feedforward(np.full((N, 1), 3.0))
    assert first.feedforward.max() == 1.0
    assert first.feedforward[0] == first.feedforward[-1] == 0.0
    assert first.clipped.all()
    free = make_learner(sample_type="f4").first_feedforward(noise(1)).feedforward
    assert np.array_equal(free, noise(1).astype(np.float32).astype(np.float64))


def test_the_next_feedforward_is_a_number_of_the_wires_type(make_learner: Make) -> None:
    """What is carried is exactly what will be sent."""
    learner = make_learner(sample_type="f4")
    carry = started(learner)
    after = learner.learn(trial_with(noise(9), carry), RunState(), carry).carry.feedforward
    assert np.array_equal(after, after.astype(np.float32).astype(np.float64))


def test_the_cap_on_change_counts_against_what_was_sent(make_learner: Make) -> None:
    """No sample moves by more from one trial to the next."""
    learner = make_learner(change_cap=0.02)
    carry = started(learner, noise(1))
    learned = learner.learn(trial_with(noise(2, 1.0), carry), RunState(), carry)
    change = np.abs(learned.carry.feedforward - carry.feedforward)
    assert change.max() <= 0.02
    assert learned.clipped_share == np.mean(learned.carry.clipped) > 0.5


def test_an_experiment_is_limited_but_not_filtered_or_learned(make_learner: Make) -> None:
    """The learned feedforward is kept while the law probes, and the law's notes come back."""
    learner = make_learner(
        Probing(), forgetting=0.5, filter=FilterSettings(bandwidth_hz=1.0), rate_limit_per_s=200.0
    )
    carry = started(learner, noise(1, 0.3))
    error = noise(2)
    probe = learner.learn(trial_with(error, carry), RunState(), carry)
    assert probe.purpose is Purpose.PROBE
    assert np.allclose(probe.carry.feedforward, carry.feedforward + 0.25, rtol=0, atol=1e-9)
    assert np.array_equal(probe.carry.learned, carry.feedforward)
    state = following(RunState(), probe)
    trial = trial_with(noise(3), probe.carry, purpose=Purpose.PROBE)
    back = learner.learn(trial, state, probe.carry)
    assert back.purpose is Purpose.LEARN
    assert back.memory == {"count": 2}
    assert not back.carry.law
    smooth = make_learner(filter=FilterSettings(bandwidth_hz=1.0), forgetting=0.5)
    same = smooth.learn(trial_with(2.0 * error, carry), RunState(), carry).carry.feedforward
    assert np.allclose(back.carry.feedforward, same, rtol=0, atol=1e-9)


def test_the_same_trial_gives_the_same_bits(make_learner: Make) -> None:
    """Two learners built alike, and the same learner twice."""
    law = PdSettings(proportional=0.4, derivative=0.01, derivative_filter_s=0.02, lead_samples=2)
    given: dict[str, Any] = {
        "law": law,
        "filter": FilterSettings(bandwidth_hz=9.0),
        "rate_limit_per_s": 3.0,
        "change_cap": 0.1,
        "pin_end": True,
        "sample_type": "f4",
    }
    results = []
    for learner in [make_learner(**given)] * 2 + [make_learner(**given)]:
        carry = started(learner, noise(1, 0.5))
        learned = learner.learn(trial_with(noise(2, 2.0), carry), RunState(), carry)
        results.append(learned.carry)
    for other in results[1:]:
        assert np.array_equal(results[0].feedforward, other.feedforward)
        assert np.array_equal(results[0].clipped, other.clipped)
    assert results[0].clipped.any()


def test_learning_changes_neither_trial_nor_carry(make_learner: Make) -> None:
    """Arrays handed in are read only."""
    learner = make_learner(average_trials=2, filter=FilterSettings(bandwidth_hz=9.0))
    carry = started(learner, noise(1, 0.9))
    trial = trial_with(noise(2, 2.0), carry)
    for array in (carry.feedforward, carry.mean_error, trial.output, trial.limited, carry.clipped):
        array.setflags(write=False)
    state = RunState()
    for _ in range(2):
        learned = learner.learn(trial, state, carry)
        state, carry = following(state, learned), learned.carry
    assert state.updates == 1


def test_a_trial_with_missing_samples_may_not_teach(make_learner: Make) -> None:
    """The text names trial and number of samples."""
    learner = make_learner()
    carry = started(learner)
    error = noise(1)
    error[4:6] = np.nan
    with pytest.raises(CoreError, match="trial 7: expected a whole output, found 2 samples"):
        learner.learn(trial_with(error, carry), RunState(), carry)


@pytest.mark.parametrize("purpose", [Purpose.BASELINE, Purpose.CONFIRM, Purpose.FLOOR])
def test_a_frozen_trial_may_not_teach(make_learner: Make, purpose: Purpose) -> None:
    """Only LEARN and PROBE trials may."""
    learner = make_learner()
    carry = started(learner)
    with pytest.raises(CoreError, match=f"trial 7: run as {purpose}"):
        learner.learn(trial_with(noise(1), carry, purpose=purpose), RunState(), carry)


def test_arrays_of_the_wrong_shape_are_refused(make_learner: Make) -> None:
    """Before the law sees them."""
    learner = make_learner()
    carry = started(learner)
    trial = replace(trial_with(noise(1), carry), limited=np.zeros((N, 2), dtype=bool))
    with pytest.raises(ShapeError, match=r"limited: expected shape \(64, 1\), found \(64, 2\)"):
        learner.learn(trial, RunState(), carry)
    with pytest.raises(ShapeError, match="initial feedforward"):
        learner.first_feedforward(np.zeros((N, 2)))
