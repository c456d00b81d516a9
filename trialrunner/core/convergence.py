"""What a run has reached, and when it is over: bookkeeping of norms and the stop rules; pure."""

import math
from collections.abc import Sequence
from dataclasses import replace
from statistics import median

from trialrunner.core.run_state import RECENT_NORMS, RunState
from trialrunner.core.settings import StopSettings
from trialrunner.core.trial import Level, Purpose, Verdict

AROUND = 2
"""Trials on each side of one that tell what error norm its feedforward usually gives."""


def book(
    state: RunState,
    purpose: Purpose,
    norm: float,
    verdicts: Sequence[Verdict],
    settings: StopSettings,
) -> RunState:
    """The state with a trial that counted entered into it.

    The norm belongs to the feedforward that the trial played. A trial for which a guard asks to
    roll back or to halt is never the best one, so that no roll back returns to it.
    """
    if purpose is Purpose.FLOOR:
        return state
    state = replace(state, counted=state.counted + 1)
    if purpose is Purpose.PROBE:
        return state
    level = max((verdict.level for verdict in verdicts), default=Level.PASS)
    state = replace(
        state,
        first_norm=norm if math.isnan(state.first_norm) else state.first_norm,
        recent_norms=(*state.recent_norms, norm)[-RECENT_NORMS:],
        recent_trials=(*state.recent_trials, state.trial)[-RECENT_NORMS:],
    )
    if level < Level.ROLL_BACK and norm < state.best_norm:
        state = replace(state, best_trial=state.trial, best_norm=norm)
    if level < Level.ROLL_BACK and state.best_trial in state.recent_trials[-1 - AROUND :]:
        state = replace(state, best_level=level_around(state, state.best_trial))
    if level is Level.PASS:
        state = replace(state, last_good_trial=state.trial)
    learns = purpose is Purpose.LEARN and state.learning
    return _stall(state, norm, settings) if learns else state


def level_around(state: RunState, trial: int) -> float:
    """Median error norm of a trial and the two before and after it; infinity if forgotten."""
    if trial not in state.recent_trials:
        return math.inf
    place = state.recent_trials.index(trial)
    return median(state.recent_norms[max(0, place - AROUND) : place + AROUND + 1])


def _stall(state: RunState, norm: float, settings: StopSettings) -> RunState:
    """Measured from the last improvement that was large enough, so that small ones add up."""
    if norm < state.stall_norm * (1.0 - settings.stall_improvement):
        return replace(state, stall=0, stall_norm=norm)
    return replace(state, stall=state.stall + 1)


def stop_reason(state: RunState, purpose: Purpose, norm: float, settings: StopSettings) -> str:
    """Why the run should end after this trial, which is booked already; empty if it should not.

    Tolerance and stall ask for a trial with a learned feedforward: neither baseline nor probe.
    """
    judged = purpose in (Purpose.LEARN, Purpose.CONFIRM)
    if judged and settings.tolerance > 0 and norm <= settings.tolerance:
        return (
            f"converged: the error norm {norm:.4g} of trial {state.trial} is within the tolerance "
            f"{settings.tolerance:.4g}"
        )
    if judged and 0 < settings.stall_trials <= state.stall:
        return (
            f"stalled: for {state.stall} trials (limit {settings.stall_trials}) the error norm has "
            f"not improved on {state.stall_norm:.4g} by {settings.stall_improvement:.3g} of it"
        )
    return count_reason(state, settings)


def count_reason(state: RunState, settings: StopSettings) -> str:
    """The one rule that holds after any trial that counted."""
    if state.counted < settings.trials:
        return ""
    return f"ended by count: {state.counted} of {settings.trials} trials have counted"
