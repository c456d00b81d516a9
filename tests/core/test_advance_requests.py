"""What an operator may ask of a run between two trials, and what stays shut."""

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from trialrunner.core.errors import CoreError, SettingError, ShapeError, TransitionError
from trialrunner.core.guards.divergence import Divergence
from trialrunner.core.guards.integrity import Integrity
from trialrunner.core.settings import LearnSettings, StopSettings

Make = Callable[..., Any]

N = 60
"""Samples of a trial on the bench."""


def test_an_operator_takes_over_a_guards_freeze(bench: Make) -> None:
    """Then only an operator ends it, and counting clean trials starts anew."""
    rig = bench()
    rig.play()
    rig.state = replace(rig.state, learning=False, frozen_by="saturation", clean_in_row=4)
    assert "frozen by saturation" in rig.request("freeze")
    assert (rig.state.frozen_by, rig.state.clean_in_row) == ("operator", 0)


def test_a_halted_run_takes_no_trial_until_resumed(bench: Make) -> None:
    """Absorbing but for an operator, who starts the counts anew."""
    rig = bench(guards={"divergence": Divergence(norm_limit=0.5)})
    assert rig.play().action == "halt"
    with pytest.raises(TransitionError, match="halted"):
        rig.play()
    rig.state = replace(rig.state, roll_backs=2, voids_in_row=4)
    assert "divergence" in rig.request("resume")
    assert (rig.state.halted, rig.state.roll_backs, rig.state.voids_in_row) == ("", 0, 0)
    assert rig.play().action == "halt", "it is judged again as before"


def test_after_a_failed_confirmation_and_resume_the_run_is_judged_anew(bench: Make) -> None:
    """A rig that has changed for good goes on learning from the error it now has."""
    rig = bench()
    for _ in range(12):
        rig.play()
    rig.play(offset=0.1)
    failed = rig.play(offset=0.1)
    rig.request("resume")
    assert (rig.state.best_trial, rig.state.best_norm) == (13, failed.norm)
    assert [rig.play(offset=0.1).action for _ in range(10)] == ["learn"] * 10
    assert rig.state.best_norm < 0.1 * failed.norm


def test_a_run_that_is_over_takes_no_trial_and_no_request(bench: Make) -> None:
    """Absorbing for good."""
    rig = bench(stop=StopSettings(trials=1, floor_trials=0))
    rig.play()
    with pytest.raises(TransitionError, match="over"):
        rig.play()
    for kind in ("freeze", "learn", "rollback", "resume"):
        with pytest.raises(CoreError, match="over"):
            rig.request(kind, "best")


def test_freeze_and_learn_by_an_operator(bench: Make) -> None:
    """Frozen trials repeat until learn; each answer says what was and what is."""
    rig = bench()
    rig.play()
    assert "until an operator" in rig.request("freeze")
    assert "already" in rig.request("freeze")
    assert (rig.state.learning, rig.state.frozen_by) == (False, "operator")
    played = rig.carry.feedforward
    for _ in range(8):
        assert rig.play().action == "repeat"
    assert rig.carry.feedforward is played
    assert "on again" in rig.request("learn")
    assert "already" in rig.request("learn")
    assert rig.play().action == "learn"


@pytest.mark.parametrize(("target", "trial"), [("best", 5), ("last_good", 5), ("2", 2)])
def test_an_operators_roll_back(bench: Make, target: str, trial: int) -> None:
    """By word or number; gain and the guards' count stay."""
    rig = bench()
    for _ in range(6):
        rig.play()
    assert f"trial {trial}" in rig.request("rollback", target)
    assert np.array_equal(rig.carry.feedforward, rig.learned[trial])
    assert (rig.state.gain, rig.state.roll_backs) == (1.0, 0)
    assert [rig.play().action for _ in range(3)] == ["repeat", "repeat", "learn"]


def test_a_roll_back_to_a_forgotten_trial_takes_its_error_as_it_comes(bench: Make) -> None:
    """Its norm is no longer in the state, so confirmation has nothing to compare with."""
    rig = bench()
    for _ in range(80):
        rig.play()
    assert "no longer known" in rig.request("rollback", "3")
    assert [rig.play().action for _ in range(3)] == ["repeat", "repeat", "learn"]


@pytest.mark.parametrize(
    ("played", "target", "words"),
    [
        (0, "best", "nothing has been learned"),
        (3, "7", "trial 7 is unknown; trials 0 to 2"),
        (3, "worst", "found 'worst'"),
        (3, "-1", "found '-1'"),
        (3, "²", "trial number"),
    ],
)
def test_a_roll_back_that_cannot_be(bench: Make, played: int, target: str, words: str) -> None:
    """Plain text, and nothing has changed."""
    rig = bench()
    for _ in range(played):
        rig.play()
    before = rig.state, rig.carry
    with pytest.raises(CoreError, match=words):
        rig.request("rollback", target)
    assert (rig.state, rig.carry) == before


def test_the_floor_trials_are_not_disturbed(bench: Make) -> None:
    """Neither roll back nor learn is taken while the floor is measured."""
    rig = bench(stop=StopSettings(trials=2))
    rig.play()
    rig.play()
    for kind, target in (("rollback", "0"), ("learn", "")):
        with pytest.raises(CoreError, match="floor trials"):
            rig.request(kind, target)


def test_unknown_requests_and_guards_are_refused_by_name(bench: Make) -> None:
    """With what would have been known."""
    with pytest.raises(CoreError, match=r"dance.*freeze, learn, resume, rollback"):
        bench().request("dance")
    with pytest.raises(SettingError, match=r"integrity.*found sentinel"):
        bench(guards={"sentinel": Integrity()})
    with pytest.raises(SettingError, match="peak_limits"):
        bench(guards={"divergence": Divergence(peak_limits={"y": 1.0})})


def test_a_roll_back_forgets_a_mean_half_taken(bench: Make) -> None:
    """It belonged to another feedforward."""
    rig = bench(learn=LearnSettings(average_trials=2))
    for _ in range(5):
        rig.play()
    assert rig.state.averaged == 1
    rig.request("rollback", "0")
    assert rig.state.averaged == 0
    assert not rig.carry.mean_error.any()
    assert rig.carry.law == {}


def test_a_recalled_feedforward_of_the_wrong_shape_is_refused(bench: Make) -> None:
    """A record that does not belong to this run is an error, not a crash later."""
    rig = bench()
    for _ in range(3):
        rig.play()
    rig.learned[1] = np.zeros((N, 2))
    with pytest.raises(ShapeError, match="recalled feedforward"):
        rig.request("rollback", "1")
