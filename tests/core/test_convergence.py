"""Bookkeeping of norms and the stop rules, on series of norms."""

import math
from collections.abc import Iterable
from dataclasses import replace

import pytest

from trialrunner.core.convergence import book, level_around, stop_reason
from trialrunner.core.run_state import RECENT_NORMS, RunState
from trialrunner.core.settings import StopSettings
from trialrunner.core.trial import Level, Purpose, Verdict


def run(
    norms: Iterable[float],
    settings: StopSettings,
    purpose: Purpose = Purpose.LEARN,
    level: Level = Level.PASS,
    state: RunState | None = None,
) -> tuple[RunState, list[str]]:
    """The state after the series and what the stop rules said after each trial."""
    state = state or RunState()
    reasons = []
    for norm in norms:
        state = book(state, purpose, norm, [Verdict("g", level)], settings)
        reasons.append(stop_reason(state, purpose, norm, settings))
        state = replace(state, trial=state.trial + 1)
    return state, reasons


def test_best_first_and_last_good_are_kept() -> None:
    """The norm belongs to the trial, the best is the smallest, the first stays the first."""
    state, _ = run([3.0, 1.0, 2.0], StopSettings())
    assert (state.first_norm, state.best_trial, state.best_norm) == (3.0, 1, 1.0)
    assert state.last_good_trial == 2
    assert (state.recent_norms, state.recent_trials) == ((3.0, 1.0, 2.0), (0, 1, 2))
    assert state.counted == 3
    equal, _ = run([1.0], StopSettings(), state=state)
    assert equal.best_trial == 1, "an equal norm does not displace it"


@pytest.mark.parametrize(
    ("level", "best", "good"),
    [
        (Level.PASS, 1, 1),
        (Level.WARN, 1, 0),
        (Level.FREEZE, 1, 0),
        (Level.ROLL_BACK, 0, 0),
        (Level.HALT, 0, 0),
    ],
)
def test_complaints_keep_a_trial_from_being_best_or_good(
    level: Level, best: int, good: int
) -> None:
    """A roll back must not return to the trial that caused it."""
    state, _ = run([3.0], StopSettings())
    state, _ = run([1.0], StopSettings(), level=level, state=state)
    assert (state.best_trial, state.last_good_trial) == (best, good)


def test_the_level_of_the_best_is_that_of_the_trials_around_it() -> None:
    """Two on each side, as they come in; what follows later no longer matters."""
    norms = [3.0, 1.25, 0.5, 1.0, 1.75, 9.0, 9.0]
    levels = [run(norms[: k + 1], StopSettings())[0].best_level for k in range(len(norms))]
    assert levels == [3.0, 2.125, 1.25, 1.125, 1.25, 1.25, 1.25]


def test_a_trial_to_roll_back_from_does_not_count_for_the_level() -> None:
    """It tells nothing about the feedforward before it."""
    state, _ = run([3.0, 1.0], StopSettings())
    level = state.best_level
    state, _ = run([9.0], StopSettings(), level=Level.ROLL_BACK, state=state)
    assert state.best_level == level


def test_a_forgotten_trial_has_no_level() -> None:
    """Infinity stands for what nobody remembers."""
    assert level_around(run([1.0] * 3, StopSettings())[0], 7) == math.inf


def test_probe_and_floor_trials_leave_the_books_alone() -> None:
    """A probe costs a trial, a floor trial not even that."""
    before, _ = run([3.0], StopSettings())
    probed, _ = run([0.1], StopSettings(), Purpose.PROBE, state=before)
    assert replace(probed, counted=1, trial=1) == before
    assert probed.counted == 2
    floored, _ = run([0.1], StopSettings(), Purpose.FLOOR, state=before)
    assert replace(floored, trial=1) == before


def test_recent_norms_are_bounded() -> None:
    """Weeks of trials cost no memory."""
    state, _ = run([1.0] * 200, StopSettings())
    assert len(state.recent_norms) == len(state.recent_trials) == RECENT_NORMS
    assert state.recent_trials[-1] == 199


def test_a_run_ends_by_count() -> None:
    """After exactly so many trials that count, of any purpose but floor."""
    for purpose in (Purpose.LEARN, Purpose.BASELINE, Purpose.PROBE, Purpose.CONFIRM):
        _, reasons = run([1.0] * 3, StopSettings(trials=3), purpose)
        assert reasons[:2] == ["", ""]
        assert "by count: 3 of 3" in reasons[2]


def test_a_run_ends_converged() -> None:
    """At the first norm within the tolerance, with both numbers."""
    _, reasons = run([3.0, 1.01, 1.0], StopSettings(tolerance=1.0))
    assert reasons[:2] == ["", ""]
    for part in ("converged", "norm 1 of trial 2", "tolerance 1"):
        assert part in reasons[2]


@pytest.mark.parametrize("purpose", [Purpose.BASELINE, Purpose.PROBE])
def test_baseline_and_probe_never_converge(purpose: Purpose) -> None:
    """Their feedforward is not a learned one."""
    assert run([0.5], StopSettings(tolerance=1.0), purpose)[1] == [""]


def test_a_run_ends_stalled() -> None:
    """No improvement of 2 % over the last one for three trials."""
    settings = StopSettings(stall_trials=3, stall_improvement=0.25)
    _, reasons = run([2.0, 1.0, 0.99, 0.75, 0.75], settings)
    assert reasons[:4] == [""] * 4
    for part in ("stalled", "3 trials", "limit 3", "on 1 by 0.25"):
        assert part in reasons[4]


def test_a_stall_of_one_trial_is_allowed() -> None:
    """The tightest setting ends at the first trial that is no better."""
    _, reasons = run([2.0, 1.0, 1.0], StopSettings(stall_trials=1))
    assert reasons[:2] == ["", ""]
    assert reasons[2]


def test_small_improvements_add_up() -> None:
    """One percent a trial is two in two trials, and so no stall."""
    _, reasons = run([0.99**k for k in range(30)], StopSettings(stall_trials=3))
    assert set(reasons) == {""}


def test_frozen_trials_do_not_stall() -> None:
    """Where nothing is learned nothing can improve."""
    frozen = RunState(learning=False)
    _, reasons = run([1.0] * 20, StopSettings(stall_trials=3), state=frozen)
    assert set(reasons) == {""}
    _, reasons = run([1.0] * 20, StopSettings(stall_trials=3), Purpose.CONFIRM)
    assert set(reasons) == {""}


def test_the_rules_are_off_by_default() -> None:
    """Tolerance 0 and stall 0 never end a run, not even at a norm of 0."""
    assert set(run([0.0] * 50, StopSettings())[1]) == {""}
