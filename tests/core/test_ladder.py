"""The rungs one by one, on hand-made run states."""

import math
from dataclasses import replace

import pytest

from trialrunner.core import ladder
from trialrunner.core.ladder import Act
from trialrunner.core.run_state import RunState
from trialrunner.core.settings import LadderSettings
from trialrunner.core.trial import Level, Purpose, Verdict

STATE = RunState(
    trial=20,
    counted=20,
    updates=15,
    averaged=1,
    best_trial=11,
    best_norm=0.3,
    best_level=0.4,
    last_good_trial=17,
    recent_norms=(0.875, 0.3, 0.5, 0.75),
    recent_trials=(10, 11, 17, 18),
)
GROWTH = Verdict("error_growth", Level.ROLL_BACK, "the norm is 2", 2.0, 1.5)


def test_the_strongest_verdict_is_the_first_of_the_highest_level() -> None:
    """Order breaks ties, and no verdict at all is a pass."""
    warn = Verdict("a", Level.WARN)
    first, second = Verdict("b", Level.FREEZE), Verdict("c", Level.FREEZE)
    assert ladder.strongest([warn, first, second]) is first
    assert ladder.strongest([]).level is Level.PASS


def test_voids_repeat_until_one_too_many_halts() -> None:
    """Three voids in a row are repeated, the fourth halts; the sentence counts them."""
    verdict = Verdict("integrity", Level.WARN, "3 of 9 samples missing", 3, 0, void=True)
    state = RunState(voids=5)
    for k in range(1, 4):
        decision = ladder.void(state, verdict, LadderSettings())
        assert decision.action is Act.REPEAT
        assert f"void {k} in a row, at most 3" in decision.sentence
        assert "3 of 9 samples missing" in decision.sentence
        state = decision.state
        assert (state.voids_in_row, state.voids) == (k, 5 + k)
    decision = ladder.void(state, verdict, LadderSettings())
    assert decision.action is Act.HALT
    assert "4 void trials in a row, the limit is 3" in decision.state.halted
    (added,) = decision.added
    assert (added.guard, added.level, added.value, added.limit) == ("ladder", Level.HALT, 4.0, 3.0)


def test_a_roll_back_returns_to_the_best_with_less_gain() -> None:
    """Half the gain, two confirmation trials against the best norm, counted."""
    decision = ladder.roll_back(STATE, GROWTH, LadderSettings())
    state = decision.state
    assert (decision.action, decision.recall_trial) == (Act.RECALL, 11)
    assert (state.gain, state.roll_backs, state.purpose) == (0.5, 1, Purpose.CONFIRM)
    assert (state.confirm_left, state.confirm_norm, state.averaged) == (2, 0.4, 0)
    for part in ("trial 20", "trial 11", "about 0.4", "0.5", "1 of at most 3", "the norm is 2"):
        assert part in decision.sentence


@pytest.mark.parametrize(
    ("gain", "expected"), [(1.0, 0.5), (0.08, 0.05), (0.05, 0.05), (0.01, 0.01)]
)
def test_the_gain_is_not_reduced_below_the_smallest(gain: float, expected: float) -> None:
    """Nor raised to it."""
    decision = ladder.roll_back(replace(STATE, gain=gain), GROWTH, LadderSettings())
    assert decision.state.gain == expected


@pytest.mark.parametrize(
    ("target", "expected"),
    [
        ("best", (11, 0.4)),
        ("last_good", (17, 0.625)),
        (10, (10, 0.5)),
        (11, (11, 0.4)),
        (3, (3, math.inf)),
        (20, (11, 0.4)),
        (99, (11, 0.4)),
    ],
)
def test_targets_of_a_roll_back(target: str | int, expected: tuple[int, float]) -> None:
    """By word or number; a trial not run yet stands for the best."""
    assert ladder.target_of(STATE, target) == expected


def test_without_a_good_trial_the_best_stands_in() -> None:
    """Every trial had a complaint."""
    assert ladder.target_of(replace(STATE, last_good_trial=-1), "last_good") == (11, 0.4)
    first = replace(STATE, last_good_trial=0)
    assert ladder.target_of(first, "last_good")[0] == 0, "the very first may be the last good"


def test_one_roll_back_too_many_halts() -> None:
    """The cap is named together with what asked for it."""
    decision = ladder.roll_back(replace(STATE, roll_backs=3), GROWTH, LadderSettings())
    assert decision.action is Act.HALT
    assert decision.state.roll_backs == 3
    for part in ("one more roll back after 3, the limit is 3", "the norm is 2"):
        assert part in decision.state.halted
    (added,) = decision.added
    assert (added.value, added.limit) == (4.0, 3.0)


def test_nowhere_to_roll_back_to_halts() -> None:
    """No trial ever stood as best."""
    state = replace(STATE, best_trial=-1, best_norm=math.inf)
    decision = ladder.roll_back(state, GROWTH, LadderSettings())
    assert decision.action is Act.HALT
    assert "no trial to roll back to among 20" in decision.state.halted
    assert (decision.added[0].value, decision.added[0].limit) == (0.0, 1.0)


def test_without_confirmation_learning_goes_on_at_once() -> None:
    """confirm_trials = 0 skips them."""
    decision = ladder.roll_back(STATE, GROWTH, LadderSettings(confirm_trials=0))
    assert decision.state.purpose is Purpose.LEARN


@pytest.mark.parametrize(("norm", "halts"), [(0.75, False), (0.76, True), (math.inf, True)])
def test_a_confirmation_must_come_back(norm: float, halts: bool) -> None:
    """Within one and a half times the norm returned to, else a person is needed."""
    state = replace(STATE, purpose=Purpose.CONFIRM, confirm_left=2, confirm_norm=0.5, stall=4)
    passed = Verdict("", Level.PASS)
    decision = ladder.unconfirmed(state, norm, passed, LadderSettings())
    assert (decision is not None) is halts
    if decision is not None:
        after = decision.state
        assert "the limit is 0.75" in after.halted
        assert (after.purpose, after.confirm_left) == (Purpose.LEARN, 0)
        assert (after.best_trial, after.best_norm, after.stall, after.stall_norm) == (
            20,
            norm,
            0,
            norm,
        )
        assert (after.last_good_trial, after.best_level) == (-1, norm)
        (added,) = decision.added
        assert (added.value, added.limit) == (norm, 0.75)


def test_a_confirmation_allows_for_the_scatter_of_the_rig() -> None:
    """What scatters by a fifth from trial to trial is confirmed within more than 1.5 times."""
    noisy = tuple(1.0 + 0.1 * (-1.0) ** k for k in range(20))
    state = replace(STATE, recent_norms=noisy, recent_trials=tuple(range(20)), confirm_norm=1.0)
    passed = Verdict("", Level.PASS)
    assert ladder.unconfirmed(state, 2.0, passed, LadderSettings()) is None
    halted = ladder.unconfirmed(state, 9.0, passed, LadderSettings())
    assert halted is not None
    assert "widened by" in halted.state.halted


def test_a_roll_back_wanted_while_confirming_halts() -> None:
    """Going back once more to the same place cannot help."""
    state = replace(STATE, purpose=Purpose.CONFIRM, confirm_left=2, confirm_norm=0.4)
    decision = ladder.unconfirmed(state, 0.6000000000000001, GROWTH, LadderSettings())
    assert decision is not None
    assert "did not help" in decision.state.halted
    assert decision.state.best_trial == 11, "the error came back, so the books still hold"


def test_a_guards_freeze_ends_after_clean_trials_in_a_row() -> None:
    """A complaint starts the count again."""
    settings = LadderSettings(resume_after_trials=3)
    state = ladder.freeze(STATE, Verdict("saturation", Level.FREEZE))
    assert (state.learning, state.frozen_by) == (False, "saturation")
    for clean in (True, True, False, True, True):
        state = ladder.count_clean(state, clean, settings)
        assert not state.learning
    state = ladder.count_clean(state, True, settings)
    assert (state.learning, state.frozen_by, state.clean_in_row) == (True, "", 0)


def test_one_clean_trial_may_be_enough() -> None:
    """resume_after_trials = 1."""
    state = replace(STATE, learning=False, frozen_by="saturation")
    assert ladder.count_clean(state, True, LadderSettings(resume_after_trials=1)).learning


@pytest.mark.parametrize(
    ("by", "after"), [("operator", 3), ("saturation", 0)], ids=["operator", "never"]
)
def test_some_freezes_only_an_operator_ends(by: str, after: int) -> None:
    """An operator's own, and a guard's where resume_after_trials is 0."""
    state = replace(STATE, learning=False, frozen_by=by)
    for _ in range(10):
        state = ladder.count_clean(state, True, LadderSettings(resume_after_trials=after))
    assert not state.learning


def test_an_operators_freeze_is_not_taken_over_by_a_guard() -> None:
    """Else the guard's clean trials would end it."""
    state = replace(STATE, learning=False, frozen_by=ladder.OPERATOR)
    assert ladder.freeze(state, Verdict("saturation", Level.FREEZE)).frozen_by == ladder.OPERATOR
