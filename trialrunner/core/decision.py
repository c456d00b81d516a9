"""From verdicts to what happens next: the order of the rungs, the order of the purposes; pure."""

from collections.abc import Sequence
from dataclasses import dataclass, replace

from trialrunner.core import convergence, ladder
from trialrunner.core.ladder import Act, Decision
from trialrunner.core.run_state import RunState
from trialrunner.core.settings import LadderSettings, StopSettings
from trialrunner.core.trial import Level, Purpose, Verdict


@dataclass(frozen=True)
class Rules:
    ladder: LadderSettings
    stop: StopSettings

    def first_state(self) -> RunState:
        """Before trial 0."""
        baseline = self.stop.baseline_trials
        purpose = Purpose.BASELINE if baseline else Purpose.LEARN
        return RunState(purpose=purpose, baseline_left=baseline)

    def decide(self, state: RunState, norm: float, verdicts: Sequence[Verdict]) -> Decision:
        """What follows from the verdicts on the trial that `state` announced; moves on by one."""
        worst = ladder.strongest(verdicts)
        void = next((verdict for verdict in verdicts if verdict.void), None)
        if void is None:
            decision = self._counted(state, norm, worst, verdicts)
        elif worst.level is Level.HALT:
            decision = ladder.halt(replace(state, voids=state.voids + 1), worst)
        else:
            decision = ladder.void(state, void, self.ladder)
        return replace(decision, state=replace(decision.state, trial=state.trial + 1))

    def _counted(
        self, state: RunState, norm: float, worst: Verdict, verdicts: Sequence[Verdict]
    ) -> Decision:
        purpose, learning = state.purpose, state.learning
        state = replace(state, voids_in_row=0)
        state = convergence.book(state, purpose, norm, verdicts, self.stop)
        if worst.level is Level.HALT:
            return ladder.halt(state, worst)
        if purpose is Purpose.FLOOR:
            return _floor(state, worst)
        if purpose is Purpose.CONFIRM:
            failed = ladder.unconfirmed(state, norm, worst, self.ladder)
            if failed is not None:
                return failed
        held = state.frozen_by == ladder.OPERATOR
        if worst.level is Level.ROLL_BACK and state.updates > 0 and not held:
            decision = ladder.roll_back(state, worst, self.ladder)
            # Only the count can end a run here: it has just been taken away from this trial.
            return self._end_if(decision, convergence.count_reason(decision.state, self.stop))
        if worst.level >= Level.FREEZE:
            # A roll back with nothing learned yet has nowhere to go back to, and what an operator
            # has frozen stays as it is.
            state = ladder.freeze(state, worst)
        else:
            state = ladder.count_clean(state, worst.level is Level.PASS, self.ladder)
        decision = self._go_on(state, norm, worst, learning and state.learning)
        return self._end_if(decision, convergence.stop_reason(state, purpose, norm, self.stop))

    def _go_on(self, state: RunState, norm: float, worst: Verdict, learns: bool) -> Decision:
        """The next trial where nothing stands in the way."""
        remark = f" {worst.guard}: {worst.reason}." if worst.level else ""
        if state.purpose in (Purpose.BASELINE, Purpose.CONFIRM):
            frozen = "" if state.learning else f" {self._why(state).capitalize()}."
            return _repeat_for_purpose(state, norm, frozen + remark)
        if learns:
            best = f"best {state.best_norm:.4g} (trial {state.best_trial})"
            sentence = f"Learned from trial {state.trial}: error norm {norm:.4g}, {best}.{remark}"
            return Decision(Act.LEARN, state, sentence)
        sentence = f"Trial {state.trial} is repeated (error norm {norm:.4g}): {self._why(state)}."
        return Decision(Act.REPEAT, replace(state, purpose=Purpose.LEARN), sentence + remark)

    def _why(self, state: RunState) -> str:
        """Why learning is frozen."""
        if state.learning:
            return "learning, which was frozen, goes on with the next trial"
        if state.frozen_by == ladder.OPERATOR or not self.ladder.resume_after_trials:
            return f"learning is frozen by {state.frozen_by} until an operator says learn"
        return (
            f"learning is frozen by {state.frozen_by} ({state.clean_in_row} of "
            f"{self.ladder.resume_after_trials} trials without complaint)"
        )

    def _end_if(self, decision: Decision, reason: str) -> Decision:
        """Turn to the floor trials, or to the end, where there is a reason."""
        if not reason or decision.action is Act.HALT:
            return decision
        recalled = decision.recall_trial >= 0
        start = f"{decision.sentence} " if recalled else ""
        said = reason[0].upper() + reason[1:]
        state = replace(decision.state, confirm_left=0)
        floor = self.stop.floor_trials
        if not floor:
            over = replace(state, over=reason)
            return replace(decision, action=Act.FINISH, state=over, sentence=f"{start}{said}.")
        return replace(
            decision,
            action=Act.RECALL if recalled else Act.REPEAT,
            state=replace(state, purpose=Purpose.FLOOR, floor_left=floor, ending=reason),
            sentence=f"{start}{said}; {floor} floor trials repeat the learned feedforward.",
        )


def _repeat_for_purpose(state: RunState, norm: float, remark: str) -> Decision:
    """Baseline and confirmation trials: one fewer to go, then learning trials."""
    if state.purpose is Purpose.BASELINE:
        left, word = state.baseline_left - 1, "baseline"
        state = replace(state, baseline_left=left)
    else:
        left, word = state.confirm_left - 1, "confirmation"
        state = replace(state, confirm_left=left)
    sentence = (
        f"Trial {state.trial} was a {word} trial (error norm {norm:.4g}, {left} left); the same "
        f"feedforward is played again."
    )
    purpose = state.purpose if left > 0 else Purpose.LEARN
    return Decision(Act.REPEAT, replace(state, purpose=purpose), sentence + remark)


def _floor(state: RunState, worst: Verdict) -> Decision:
    """Guards below halt are only noted here: nothing is learned, and going back would spoil it."""
    remark = f" {worst.guard}: {worst.reason}." if worst.level else ""
    left = state.floor_left - 1
    state = replace(state, floor_left=left)
    floor = "one floor trial tells no repeatability floor"
    if state.floor_count > 1:
        floor = f"repeatability floor {state.floor_norm:.4g} from {state.floor_count} trials"
    if left > 0:
        sentence = f"Trial {state.trial} was a floor trial, {left} left ({floor}).{remark}"
        return Decision(Act.REPEAT, state, sentence)
    over = replace(state, over=state.ending)
    said = state.ending[:1].upper() + state.ending[1:]
    return Decision(Act.FINISH, over, f"{said}. The run is over; {floor}.{remark}")
