"""The whole way of a trial, with the real law and limits, on a bench of one line of arithmetic."""

import json
import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from trialrunner.core.errors import ShapeError, TransitionError
from trialrunner.core.guards.divergence import Divergence
from trialrunner.core.guards.integrity import Integrity
from trialrunner.core.run_state import Outcome, RunState
from trialrunner.core.settings import LearnSettings, StopSettings
from trialrunner.core.trial import Level, Purpose

Make = Callable[..., Any]

N = 60
"""Samples of a trial on the bench."""


def assert_same(a: Outcome, b: Outcome) -> None:
    """The same bits in verdicts, state and arrays."""
    assert (a.verdicts, a.void, a.action, a.sentence, a.late) == (
        b.verdicts,
        b.void,
        b.action,
        b.sentence,
        b.late,
    )
    assert json.dumps(a.state.to_json()) == json.dumps(b.state.to_json())
    for name in ("feedforward", "clipped", "learned", "mean_error"):
        assert getattr(a.carry, name).tobytes() == getattr(b.carry, name).tobytes()
    for x, y in ((a.carry.law, b.carry.law), (a.carry.floor, b.carry.floor)):
        assert {k: v.tobytes() for k, v in x.items()} == {k: v.tobytes() for k, v in y.items()}


def test_a_run_learns_down_to_the_noise_and_measures_its_floor(bench: Make) -> None:
    """Twenty trials, four floor trials, the floor close to the noise that was put in."""
    rig = bench(stop=StopSettings(trials=20, floor_trials=4))
    while not rig.state.over:
        rig.play()
    assert len(rig.outcomes) == 24
    assert rig.state.first_norm > 1.0
    assert rig.state.best_norm < 0.002
    assert rig.state.floor_count == 4
    assert rig.state.floor_norm == pytest.approx(0.001, rel=0.15)
    assert rig.outcomes[-1].action == "finish"
    assert "by count" in rig.state.over


def test_the_floor_is_that_of_the_floor_trials(bench: Make) -> None:
    """Streaming, and equal to the plain definition over the stored errors."""
    rig = bench(stop=StopSettings(trials=3, floor_trials=6))
    errors = []
    while not rig.state.over:
        errors.append(rig.trial().error)
        rig.play()
    spread = np.std(np.array(errors[3:]), axis=0, ddof=1)
    assert rig.state.floor_norm == pytest.approx(float(np.sqrt(np.mean(spread**2))), rel=1e-12)


def test_floor_trials_repeat_the_feedforward_of_the_last_trial(bench: Make) -> None:
    """Not an update made from it, which nobody has seen run."""
    rig = bench(stop=StopSettings(trials=3, floor_trials=2))
    for _ in range(2):
        rig.play()
    last = rig.carry.feedforward
    while not rig.state.over:
        rig.play()
        assert rig.carry.feedforward is last


def test_the_first_feedforward_is_zero_or_the_one_given(bench: Make) -> None:
    """Given ones are limited and rounded to the rig's sample type."""
    advancer = bench().advancer
    state, carry = advancer.begin()
    assert (state.trial, state.purpose) == (0, Purpose.LEARN)
    assert not carry.feedforward.any()
    assert carry.mean_error.shape == (N, 1)
    _, carry = advancer.begin(np.full((N, 1), 7.1))
    assert carry.feedforward.max() == np.float32(5.0)
    _, carry = advancer.begin(np.full((N, 1), 0.1))
    assert np.array_equal(carry.feedforward, np.full((N, 1), np.float64(np.float32(0.1))))
    with pytest.raises(ShapeError):
        advancer.begin(np.zeros((N, 2)))


def test_judging_and_advancing_apart_is_the_same_as_together(bench: Make) -> None:
    """The verdicts can be told before the law is done, and nothing else changes."""
    rig = bench()
    rig.play()
    trial = rig.trial()
    judged = rig.advancer.judge(trial, rig.state, rig.carry)
    assert (judged.action, judged.void) == ("learn", False)
    apart = rig.advancer.advance_judged(judged, rig.recall)
    assert judged.verdicts == apart.verdicts
    assert judged.norm == apart.norm
    assert_same(apart, rig.advancer.advance(trial, rig.state, rig.carry, rig.recall))


def test_a_restart_from_json_goes_on_bit_for_bit(bench: Make) -> None:
    """State through JSON, arrays as stored: the next trials are the same."""
    first, second = (bench(stop=StopSettings(baseline_trials=2, trials=9)) for _ in range(2))
    while not first.state.over:
        first.play()
        second.state = RunState.from_json(json.loads(json.dumps(second.state.to_json())))
        second.play()
        assert_same(first.outcomes[-1], second.outcomes[-1])


def test_a_late_update_repeats_what_was_played(bench: Make) -> None:
    """Verdicts and bookkeeping stand; the feedforward, the law's memory and updates do not move."""
    rig = bench()
    rig.play()
    played, trial = rig.carry.feedforward, rig.trial()
    judged = rig.advancer.judge(trial, rig.state, rig.carry)
    outcome = rig.advancer.advance_judged(judged, rig.recall, late=True)
    assert outcome.state == judged.late_state
    assert (outcome.action, outcome.late, outcome.state.late_updates) == ("repeat", True, 1)
    assert np.array_equal(outcome.carry.feedforward, played)
    assert (outcome.state.updates, outcome.state.counted) == (1, 2)
    assert "too late" in outcome.sentence


def test_only_an_update_can_be_late(bench: Make) -> None:
    """A void trial repeats anyway."""
    rig = bench()
    outcome = rig.play_void(late=True)
    assert (outcome.late, outcome.state.late_updates) == (False, 0)


def test_a_void_trial_changes_nothing_but_the_count(bench: Make) -> None:
    """Feedforward, learned feedforward and law stay as they are, and the norm is unknown."""
    rig = bench()
    rig.play()
    before = rig.carry
    outcome = rig.play_void()
    assert outcome.void
    assert math.isnan(outcome.norm)
    assert rig.carry is before
    assert "integrity" in outcome.sentence


def test_guards_remember_from_trial_to_trial(bench: Make) -> None:
    """Their memories go through the state; a guard without one leaves no entry."""
    rig = bench()
    for _ in range(6):
        rig.play()
    assert {"error_growth", "saturation", "law"} <= set(rig.state.memories)
    assert "divergence" not in rig.state.memories
    assert len(rig.state.memories["saturation"]["shares"]) == 6


def test_a_guard_that_is_off_is_not_asked(bench: Make) -> None:
    """It leaves no verdict at all."""
    rig = bench(guards={"divergence": Divergence(norm_limit=0.1, enabled=False)})
    outcome = rig.play()
    assert outcome.action == "learn"
    assert "divergence" not in {verdict.guard for verdict in outcome.verdicts}


def test_learning_guards_see_no_void_trial(bench: Make) -> None:
    """Only admission speaks about a trial that does not count."""
    names = {verdict.guard for verdict in bench().play_void().verdicts}
    assert names == {"integrity", "start_state", "start_timing", "envelope"}
    names = {verdict.guard for verdict in bench().play().verdicts}
    assert names >= {"integrity", "divergence", "error_growth", "saturation"}


def test_an_error_that_is_no_number_never_teaches_even_without_integrity(bench: Make) -> None:
    """With the guard switched off the trial is void all the same."""
    rig = bench(guards={"integrity": Integrity(enabled=False)})
    rig.play()
    before = rig.carry
    outcome = rig.play(output=np.full((N, 1), np.inf))
    assert outcome.void
    assert [verdict.guard for verdict in outcome.verdicts][-2:] == ["envelope", "ladder"]
    assert rig.carry is before


def test_growth_rolls_back_to_the_best_and_is_confirmed(bench: Make) -> None:
    """A disturbance that learning did not cause: back, two frozen trials, on with half the gain."""
    rig = bench()
    for _ in range(12):
        rig.play()
    best = rig.state.best_trial
    outcome = rig.play(offset=0.1)
    assert outcome.action == "recall"
    assert f"feedforward of trial {best}" in outcome.sentence
    assert np.array_equal(rig.carry.feedforward, rig.learned[best])
    assert (rig.state.gain, rig.state.purpose) == (0.5, Purpose.CONFIRM)
    assert [rig.play().action for _ in range(3)] == ["repeat", "repeat", "learn"]


def test_a_roll_back_that_does_not_help_halts(bench: Make) -> None:
    """The disturbance stays: the first confirmation trial halts and says so."""
    rig = bench()
    for _ in range(12):
        rig.play()
    rig.play(offset=0.1)
    outcome = rig.play(offset=0.1)
    assert outcome.action == "halt"
    assert "not confirmed" in rig.state.halted
    assert outcome.verdicts[-1].level is Level.HALT


def test_arrays_that_do_not_fit_together_are_refused(bench: Make) -> None:
    """Before numpy could broadcast them into a wrong error."""
    for changes in ({"output": np.zeros((N, 2))}, {"limited": np.zeros((1, 1), dtype=bool)}):
        with pytest.raises(ShapeError):
            bench().play(**changes)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"index": 4}, "expected trial 0"),
        ({"purpose": Purpose.FLOOR}, "learn"),
        ({"feedforward": np.ones((N, 1))}, "another feedforward"),
    ],
)
def test_a_trial_that_was_not_announced_is_refused(
    bench: Make, changes: dict[str, Any], words: str
) -> None:
    """Wrong index, purpose or feedforward: an error of ours, never learned from."""
    with pytest.raises(TransitionError, match=words):
        bench().play(**changes)


def test_averaging_repeats_until_the_mean_is_taken(bench: Make) -> None:
    """Three trials make one update; the two before it are recorded as learn without an update."""
    rig = bench(learn=LearnSettings(average_trials=3))
    updates = []
    for _ in range(6):
        rig.play()
        updates.append((rig.state.updates, rig.state.averaged))
    assert updates == [(0, 1), (0, 2), (1, 0), (1, 1), (1, 2), (2, 0)]


def test_the_soft_start_is_not_called_saturation(bench: Make) -> None:
    """While the allowed feedforward rises the guard sees the rig's reports only."""
    rig = bench(learn=LearnSettings(soft_start_trials=4, soft_start_fraction=0.01))
    for _ in range(10):
        outcome = rig.play()
        assert all(v.level is Level.PASS for v in outcome.verdicts if v.guard == "saturation")
    assert rig.state.best_norm < 0.01 * rig.state.first_norm
