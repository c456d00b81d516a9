"""The ladder: what each rung of a verdict does to the run; pure functions of the run state.

Here `state.trial` is still the trial that was judged; `decision.decide` moves on to the next.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from enum import StrEnum

from trialrunner.core.convergence import level_around
from trialrunner.core.run_state import RunState
from trialrunner.core.scatter import allowance
from trialrunner.core.settings import LadderSettings
from trialrunner.core.trial import Level, Purpose, Verdict

NAME = "ladder"
"""Stands as the guard's name in verdicts that the ladder itself adds."""

OPERATOR = "operator"
"""Stands in `frozen_by` for a freeze that only an operator ends."""


CONFIRM_DEVIATIONS = 3.0
"""Standard deviations of the norm's scatter by which the limit of a confirmation is widened."""


class Act(StrEnum):
    """What becomes of the feedforward."""

    LEARN = "learn"
    REPEAT = "repeat"
    RECALL = "recall"
    HALT = "halt"
    FINISH = "finish"


@dataclass(frozen=True)
class Decision:
    action: Act
    state: RunState
    """For the next trial, except what the law will add."""
    sentence: str
    recall_trial: int = -1
    """Its feedforward is played next; -1: none is recalled."""
    added: tuple[Verdict, ...] = ()
    """The ladder's own verdicts."""


def strongest(verdicts: Sequence[Verdict]) -> Verdict:
    """The first of the highest level."""
    return max(verdicts, key=lambda verdict: verdict.level, default=Verdict("", Level.PASS))


def halt(state: RunState, verdict: Verdict) -> Decision:
    """Stop until an operator says resume. A probe is not played again."""
    text = f"{verdict.guard}: {verdict.reason}"
    sentence = f"Trial {state.trial} halted the run. {text}."
    purpose = Purpose.LEARN if state.purpose is Purpose.PROBE else state.purpose
    return Decision(Act.HALT, replace(state, halted=text, purpose=purpose), sentence)


def _own_halt(state: RunState, reason: str, value: float, limit: float) -> Decision:
    verdict = Verdict(NAME, Level.HALT, reason, float(value), float(limit))
    return replace(halt(state, verdict), added=(verdict,))


def void(state: RunState, verdict: Verdict, settings: LadderSettings) -> Decision:
    """A void trial teaches nothing and is repeated, whatever its purpose; too many halt."""
    in_row, most = state.voids_in_row + 1, settings.max_voids_in_row
    state = replace(state, voids_in_row=in_row, voids=state.voids + 1)
    text = f"{verdict.guard}: {verdict.reason}"
    if in_row > most:
        reason = f"{in_row} void trials in a row, the limit is {most}; the last by {text}"
        return _own_halt(state, reason, in_row, most)
    sentence = (
        f"Trial {state.trial} is void and is played again with the same feedforward "
        f"(void {in_row} in a row, at most {most}). {text}."
    )
    return Decision(Act.REPEAT, state, sentence)


def freeze(state: RunState, verdict: Verdict) -> RunState:
    """Learning off. An operator's freeze stays the operator's."""
    by = OPERATOR if state.frozen_by == OPERATOR else verdict.guard
    return replace(state, learning=False, frozen_by=by, clean_in_row=0)


def count_clean(state: RunState, clean: bool, settings: LadderSettings) -> RunState:
    """Count trials without complaint while frozen, and end a guard's freeze after enough."""
    if state.learning:
        return state
    in_row = state.clean_in_row + 1 if clean else 0
    state = replace(state, clean_in_row=in_row)
    if state.frozen_by == OPERATOR or not 0 < settings.resume_after_trials <= in_row:
        return state
    return thaw(state)


def thaw(state: RunState) -> RunState:
    """Learning on, from the next trial on."""
    return replace(state, learning=True, frozen_by="", clean_in_row=0)


def roll_back(state: RunState, verdict: Verdict, settings: LadderSettings) -> Decision:
    """Return to an older feedforward with a smaller gain, and have it confirmed."""
    text = f"{verdict.guard}: {verdict.reason}"
    if state.roll_backs >= settings.max_roll_backs:
        done = state.roll_backs
        reason = f"one more roll back after {done}, the limit is {settings.max_roll_backs}; {text}"
        return _own_halt(state, reason, done + 1, settings.max_roll_backs)
    target, norm = target_of(state, settings.roll_back_to)
    if target < 0:
        reason = f"no trial to roll back to among {state.counted} that counted (limit 1); {text}"
        return _own_halt(state, reason, 0, 1)
    # A gain that was configured below the smallest one is left alone.
    gain = max(state.gain * settings.gain_factor, min(settings.min_gain, state.gain))
    state = replace(return_to(state, norm, settings), gain=gain, roll_backs=state.roll_backs + 1)
    sentence = (
        f"Rolled back from trial {state.trial} to the feedforward of trial {target} (error norm "
        f"about {norm:.4g}), gain now {gain:.3g}, {state.confirm_left} confirmation trials, "
        f"roll back {state.roll_backs} of at most {settings.max_roll_backs}. {text}."
    )
    return Decision(Act.RECALL, state, sentence, recall_trial=target)


def target_of(state: RunState, target: str | int) -> tuple[int, float]:
    """Trial that a roll back returns to and the error norm to expect; (-1, infinity) if none.

    What to expect is the level around the trial, infinity if nobody remembers it. A trial that has
    not been run, and a last good one that does not exist, stand for the best.
    """
    trial = state.best_trial
    if target == "last_good" and state.last_good_trial >= 0:
        trial = state.last_good_trial
    elif isinstance(target, int) and target < state.trial:
        trial = target
    return trial, state.best_level if trial == state.best_trial else level_around(state, trial)


def return_to(state: RunState, norm: float, settings: LadderSettings) -> RunState:
    """Frozen trials first that must come back to `norm`; what the law had gathered is void."""
    trials = settings.confirm_trials
    return replace(
        state,
        purpose=Purpose.CONFIRM if trials else Purpose.LEARN,
        confirm_left=trials,
        confirm_norm=norm,
        averaged=0,
    )


def unconfirmed(
    state: RunState, norm: float, verdict: Verdict, settings: LadderSettings
) -> Decision | None:
    """The halt that follows when going back did not bring the old error back; None if it did.

    Then the feedforward is not to blame, and a person has to look at the rig. Old norms no longer
    hold, so the books begin again with this trial, in case the run is resumed.
    """
    wider = allowance(state.recent_norms, CONFIRM_DEVIATIONS)
    limit = settings.confirm_ratio * wider * state.confirm_norm
    if norm <= limit and verdict.level < Level.ROLL_BACK:
        return None
    after = replace(state, purpose=Purpose.LEARN, confirm_left=0)
    if norm > limit:
        after = replace(
            after,
            best_trial=state.trial,
            best_norm=norm,
            best_level=norm,
            last_good_trial=-1,
            stall=0,
            stall_norm=norm,
        )
        reason = (
            f"the roll back is not confirmed: the error norm is {norm:.4g}; the limit is "
            f"{limit:.4g}, {settings.confirm_ratio:.3g} times the {state.confirm_norm:.4g} "
            f"returned to, widened by {wider:.3g} for the scatter from trial to trial"
        )
        return _own_halt(after, reason, norm, limit)
    reason = f"a roll back did not help, {verdict.guard} still asks for one: {verdict.reason}"
    return _own_halt(after, reason, verdict.value, verdict.limit)
