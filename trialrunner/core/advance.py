"""One trial's way from measured to the next feedforward: used unchanged by daemon and replay.

`judge` is quick (guards, ladder, order of purposes) and needs no law, so that the verdicts can be
told before the update is computed; `advance_judged` does the rest. All pure: the same settings,
state, carry and trial give the same bits.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from trialrunner.core import ladder
from trialrunner.core.decision import Rules
from trialrunner.core.envelope import Envelope
from trialrunner.core.errors import CoreError, SettingError, TransitionError, require_shape
from trialrunner.core.guards import ChecksChannels, GuardContext, Stage, guard_table
from trialrunner.core.guards.envelope import Envelope as EnvelopeGuard
from trialrunner.core.ladder import Act, Decision
from trialrunner.core.laws import LawContext
from trialrunner.core.learning import Learner
from trialrunner.core.norms import Repeatability, error_norm
from trialrunner.core.run_state import Carry, Outcome, Recall, Request, RunState
from trialrunner.core.settings import RunSettings
from trialrunner.core.trial import Array, GuardResult, Level, Memory, Purpose, Trial, Verdict

LAW = "law"
"""Key of the law's own memory among the guards' memories."""


@dataclass(frozen=True)
class Judged:
    """A trial with its verdicts and what was decided; the law has not been asked yet."""

    trial: Trial
    before: RunState
    """The state before the trial."""
    carry: Carry
    """The arrays before the trial, except the floor statistics."""
    verdicts: tuple[Verdict, ...]
    norm: float
    decision: Decision

    @property
    def action(self) -> str:
        """learn, repeat, recall, halt or finish."""
        return self.decision.action.value

    @property
    def void(self) -> bool:
        return any(verdict.void for verdict in self.verdicts)

    @property
    def late_state(self) -> RunState:
        """The next state if the update misses its deadline: what was played is played again."""
        late_updates = self.decision.state.late_updates + 1
        return replace(self.decision.state, late_updates=late_updates, purpose=self.trial.purpose)


class Advancer:
    """Judges trials and makes the next feedforward. Holds settings only, no state."""

    def __init__(self, settings: RunSettings, context: LawContext, sample_type: str) -> None:
        """`sample_type` is the rig's, "f4" or "f8". Raises SettingError."""
        self._settings = settings
        self._learner = Learner(settings, context, sample_type)
        self._rules = Rules(settings.ladder, settings.stop)
        self._scales = np.array([channel.scale for channel in settings.outputs])
        self._guards = _guards(settings)
        asked = (guard for stage in self._guards.values() for guard in stage.values())
        self._n_charts = sum(getattr(guard, "CHARTS", 0) for guard in asked)

    def envelope(self, reference: Array) -> Envelope | None:
        """Limits to check samples by while they stream in, (n_samples, n_outputs); None: none."""
        guard = self._guards[Stage.ADMISSION].get(EnvelopeGuard.NAME)
        if guard is None:
            return None
        settings = self._settings
        limits = guard.limits(settings.outputs, settings.horizon.period_s, reference)
        return None if limits.is_off else limits

    def begin(self, initial_feedforward: Array | None = None) -> tuple[RunState, Carry]:
        """State and arrays before trial 0; starts from zero unless a feedforward is given.

        `initial_feedforward` is (n_samples, n_inputs); it is brought inside the limits.
        """
        first = self._learner.first_feedforward(initial_feedforward)
        mean_error = np.zeros((first.feedforward.shape[0], len(self._settings.outputs)))
        carry = Carry(first.feedforward, first.clipped, first.feedforward, mean_error)
        return self._rules.first_state(), carry

    def advance(
        self, trial: Trial, state: RunState, carry: Carry, recall: Recall, late: bool = False
    ) -> Outcome:
        """`judge` and `advance_judged` in one."""
        return self.advance_judged(self.judge(trial, state, carry), recall, late)

    def judge(self, trial: Trial, state: RunState, carry: Carry) -> Judged:
        """Guards, ladder and stop rules; the law is not asked.

        Raises TransitionError if the run is over or halted, or if this is not the trial that
        `state` and `carry` announce.
        """
        _require_expected(trial, state, carry)
        with np.errstate(over="ignore", invalid="ignore"):
            norm = error_norm(trial.error, self._scales)
            verdicts, memories = self._ask_guards(trial, state, carry, norm)
        before = replace(state, memories=memories)
        if trial.purpose is Purpose.FLOOR and not any(verdict.void for verdict in verdicts):
            before, carry = self._measure_floor(trial, before, carry)
        decision = self._rules.decide(before, norm, verdicts)
        verdicts = (*verdicts, *decision.added)
        return Judged(trial, state, carry, verdicts, norm, decision)

    def advance_judged(self, judged: Judged, recall: Recall, late: bool = False) -> Outcome:
        """The next state and arrays.

        `late` says that the update missed its deadline: the verdicts stand, and what was just
        played is played again. Raises CoreError if `recall` cannot find its trial.
        """
        decision, trial = judged.decision, judged.trial
        state, carry, sentence = decision.state, judged.carry, decision.sentence
        action, late = decision.action, late and decision.action is Act.LEARN
        if late:
            action, state = Act.REPEAT, judged.late_state
            sentence = f"{sentence} The update came too late; trial {trial.index} is played again."
        elif decision.recall_trial >= 0:
            state, carry = _recalled(state, carry, recall(decision.recall_trial))
        elif action is Act.LEARN:
            state, carry = self._learn(judged)
        elif trial.purpose is Purpose.PROBE and not judged.void:
            # The law's experiment is given up: the learned feedforward is played again.
            state, carry = _recalled(state, carry, carry.learned)
        return Outcome(
            verdicts=judged.verdicts,
            void=judged.void,
            norm=judged.norm,
            action=action.value,
            sentence=sentence,
            state=state,
            carry=carry,
            late=late,
        )

    def apply_request(
        self, request: Request, state: RunState, carry: Carry, recall: Recall
    ) -> tuple[RunState, Carry, str]:
        """An operator's request, between two trials: state, arrays, and a sentence on the effect.

        `freeze` and `learn` may also come between a trial and its judgement; they hold for its
        update. Raises CoreError with a plain text if it cannot be done; nothing has changed then.
        """
        if state.over:
            raise CoreError(f"{request.kind}: the run is over: {state.over}")
        if request.kind == "rollback":
            return self._roll_back_to(request.target, state, carry, recall)
        change = _CHANGES.get(request.kind)
        if change is None:
            known = ", ".join((*_CHANGES, "rollback"))
            raise CoreError(f"unknown request {request.kind}; expected one of {known}")
        state, sentence = change(state)
        return state, carry, sentence

    def refusal(self, request: Request, state: RunState) -> str:
        """Why `apply_request` would not do it in this state; empty if it would."""
        try:
            if state.over:
                raise CoreError(f"{request.kind}: the run is over: {state.over}")
            if request.kind == "rollback":
                _operator_target(request.target, state)
            else:
                _CHANGES[request.kind](state)
        except CoreError as error:
            return str(error)
        return ""

    def _ask_guards(
        self, trial: Trial, state: RunState, carry: Carry, norm: float
    ) -> tuple[tuple[Verdict, ...], dict[str, Memory]]:
        """Admission first; only a trial that counts is shown to the guards of learning."""
        context = self._context(state, carry, norm)
        memories, verdicts = dict(state.memories), []
        for stage in Stage:
            for name, guard in self._guards[stage].items():
                result: GuardResult = guard.judge(trial, context, memories.get(name, {}))
                verdicts.append(result.verdict)
                if result.memory or name in memories:
                    memories[name] = result.memory
            if stage is Stage.ADMISSION and not any(verdict.void for verdict in verdicts):
                verdicts += _unusable(norm)
            if any(verdict.void for verdict in verdicts):
                break
        return tuple(verdicts), memories

    def _context(self, state: RunState, carry: Carry, norm: float) -> GuardContext:
        return GuardContext(
            period_s=self._settings.horizon.period_s,
            inputs=self._settings.inputs,
            outputs=self._settings.outputs,
            clipped=carry.clipped,
            error_norm=norm,
            first_norm=state.first_norm,
            best_norm=state.best_norm,
            best_trial=state.best_trial,
            recent_norms=_recent_norms(state),
            learning=state.learning,
            limits_rising=state.updates < self._settings.learn.soft_start_trials,
            n_charts=self._n_charts,
            auxiliary=self._settings.auxiliary,
        )

    def _learn(self, judged: Judged) -> tuple[RunState, Carry]:
        """Ask the law; its filter, limits and averaging are the learner's affair."""
        state = judged.decision.state
        learned = self._learner.learn(judged.trial, state, judged.carry)
        state = replace(
            state,
            purpose=learned.purpose,
            updates=state.updates + learned.updated,
            averaged=learned.averaged,
            memories={**state.memories, LAW: learned.memory},
        )
        return state, learned.carry

    def _measure_floor(self, trial: Trial, state: RunState, carry: Carry) -> tuple[RunState, Carry]:
        """Take a floor trial into the streaming repeatability floor."""
        spread = Repeatability.empty(*trial.error.shape)
        if carry.floor:
            mean, squares = carry.floor["mean"], carry.floor["squares"]
            spread = Repeatability(state.floor_count, mean, squares)
        spread = spread.add(trial.error)
        state = replace(state, floor_count=spread.n_trials, floor_norm=spread.floor(self._scales))
        return state, replace(carry, floor={"mean": spread.mean, "squares": spread.squares})

    def _roll_back_to(
        self, target: str, state: RunState, carry: Carry, recall: Recall
    ) -> tuple[RunState, Carry, str]:
        """An operator's roll back: gain and count of roll backs stay as they are."""
        trial, norm = _operator_target(target, state)
        state = ladder.return_to(state, norm, self._settings.ladder)
        state, carry = _recalled(_judge_anew(state), carry, recall(trial))
        known = (
            f"error norm about {norm:.4g}" if np.isfinite(norm) else "error norm no longer known"
        )
        sentence = (
            f"Rolled back to the feedforward of trial {trial} ({known}); {state.confirm_left} "
            f"confirmation trials follow."
        )
        return state, carry, sentence


def _guards(settings: RunSettings) -> dict[Stage, dict[str, Any]]:
    """Enabled guards by stage in the table's order; one that is not configured has defaults."""
    table = guard_table()
    unknown = set(settings.guards) - set(table)
    if unknown:
        raise SettingError(
            f"guards: expected {', '.join(table)}; found {', '.join(sorted(unknown))}"
        )
    found: dict[Stage, dict[str, Any]] = {stage: {} for stage in Stage}
    for name, (stage, cls) in table.items():
        guard = settings.guards.get(name, cls())
        if isinstance(guard, ChecksChannels):
            guard.check_channels(settings.outputs)
        if guard.enabled:
            found[stage][name] = guard
    return found


def _unusable(norm: float) -> tuple[Verdict, ...]:
    """Whatever guards are off: an error that is no number never teaches."""
    if np.isfinite(norm):
        return ()
    reason = f"the error norm is {norm}, not 1 finite number"
    return (Verdict(ladder.NAME, Level.WARN, reason, 0.0, 1.0, void=True),)


def _require_expected(trial: Trial, state: RunState, carry: Carry) -> None:
    if state.over or state.halted:
        word, why = ("over", state.over) if state.over else ("halted", state.halted)
        raise TransitionError(f"trial {trial.index}: the run is {word} ({why}) and takes no trial")
    if (trial.index, trial.purpose) != (state.trial, state.purpose):
        raise TransitionError(
            f"expected trial {state.trial} ({state.purpose}), found trial {trial.index} "
            f"({trial.purpose})"
        )
    require_shape("output", trial.output, trial.reference.shape)
    require_shape("limited", trial.limited, carry.feedforward.shape)
    if not np.array_equal(trial.feedforward, carry.feedforward):
        raise TransitionError(
            f"trial {trial.index} was played with another feedforward than the run state holds"
        )


def _recalled(state: RunState, carry: Carry, feedforward: Array) -> tuple[RunState, Carry]:
    """An older feedforward in place of the present one; what the law gathered goes with it."""
    require_shape("recalled feedforward", feedforward, carry.learned.shape)
    memories = {name: memory for name, memory in state.memories.items() if name != LAW}
    carry = replace(
        carry,
        feedforward=feedforward,
        learned=feedforward,
        # Where limits had cut the law's wish for it is not recorded; the next update shows it.
        clipped=np.zeros(carry.clipped.shape, dtype=bool),
        mean_error=np.zeros(carry.mean_error.shape),
        law={},
    )
    return replace(state, averaged=0, memories=memories), carry


def _operator_target(target: str, state: RunState) -> tuple[int, float]:
    """Trial and its error norm; raises CoreError in words for an operator."""
    if state.floor_left >= 0:
        raise CoreError("rollback: the floor trials run; a roll back would spoil them")
    if state.updates == 0:
        raise CoreError("rollback: nothing has been learned yet, so there is nothing to go back to")
    if target in ("best", "last_good"):
        trial, norm = ladder.target_of(state, target)
        if trial < 0:
            raise CoreError(f"rollback: there is no {target.replace('_', ' ')} trial yet")
        return trial, norm
    if not (target.isascii() and target.isdigit()):
        raise CoreError(f"rollback: expected best, last_good or a trial number, found {target!r}")
    if int(target) >= state.trial:
        raise CoreError(
            f"rollback: trial {target} is unknown; trials 0 to {state.trial - 1} have been run"
        )
    return ladder.target_of(state, int(target))


def _recent_norms(state: RunState) -> tuple[float, ...]:
    pairs = zip(state.recent_trials, state.recent_norms, strict=True)
    return tuple(norm for trial, norm in pairs if trial >= state.judged_from)


def _judge_anew(state: RunState) -> RunState:
    """A person decided how to go on: what was reached before is no measure of that."""
    law = {name: memory for name, memory in state.memories.items() if name == LAW}
    return replace(state, judged_from=state.trial, memories=law)


def _freeze(state: RunState) -> tuple[RunState, str]:
    frozen = replace(state, learning=False, frozen_by=ladder.OPERATOR, clean_in_row=0)
    if state.learning:
        return frozen, "Learning is frozen until an operator says learn."
    if state.frozen_by == ladder.OPERATOR:
        return state, "Learning was frozen by an operator already."
    return frozen, f"Learning was frozen by {state.frozen_by}; now only an operator ends that."


def _allow_learning(state: RunState) -> tuple[RunState, str]:
    if state.floor_left >= 0:
        raise CoreError("learn: the floor trials run; nothing is learned any more")
    if state.learning:
        return state, "Learning was on already."
    return ladder.thaw(state), f"Learning is on again; it was frozen by {state.frozen_by}."


def _resume(state: RunState) -> tuple[RunState, str]:
    """A person has looked: the counts that lead to a halt start anew."""
    if not state.halted:
        return state, "No guard had halted the run."
    goes_on = replace(_judge_anew(state), halted="", voids_in_row=0, roll_backs=0)
    return goes_on, f"The run goes on with trial {state.trial}; it was halted by {state.halted}."


_CHANGES: dict[str, Callable[[RunState], tuple[RunState, str]]] = {
    "freeze": _freeze,
    "learn": _allow_learning,
    "resume": _resume,
}
