"""From a trial to the next feedforward: average, law, masks, forgetting, filter, limits."""

from dataclasses import dataclass, replace

import numpy as np

from trialrunner.core.errors import CoreError, require_shape
from trialrunner.core.filters import QFilter
from trialrunner.core.laws import Law, LawContext, Step
from trialrunner.core.limits import Limited, Limits
from trialrunner.core.run_state import Carry, RunState
from trialrunner.core.settings import RunSettings
from trialrunner.core.trial import Array, Mask, Memory, Purpose, Trial

RIG_LIMITED = "rig_limited"
"""Name among the carried arrays under which samples limited in any averaged trial are kept."""


@dataclass(frozen=True)
class Learned:
    """What a trial taught."""

    carry: Carry
    memory: Memory
    """The law's, for `state.memories["law"]`."""
    purpose: Purpose
    """Why the next trial is run."""
    updated: bool
    """False while trials are still being averaged; the same feedforward is then repeated."""
    averaged: int
    """Trials now in the running mean error, for `state.averaged`."""
    clipped_share: float
    """Share of samples of the next feedforward that limits changed."""


class Learner:
    """The learning part of a run. Pure: the same bits for the same trial, state and carry."""

    def __init__(self, settings: RunSettings, context: LawContext, sample_type: str) -> None:
        """`sample_type` is the rig's, "f4" or "f8". Raises SettingError if settings do not fit."""
        self._settings = settings.learn
        self._context = context
        self._law: Law = settings.law.build(context)
        self._filter = QFilter(settings.filter, context.n_samples, context.period_s)
        self._limits = Limits.of(settings, context, sample_type)

    def first_feedforward(self, initial: Array | None = None) -> Limited:
        """The feedforward of the first trial, as it will be sent: `initial`, or zero, limited.

        `initial`: (n_samples, n_inputs). The soft start applies, the cap on change does not.
        """
        shape = (self._context.n_samples, self._context.n_inputs)
        wish = np.zeros(shape) if initial is None else initial
        require_shape("initial feedforward", wish, shape)
        return self._limits.apply(wish, share=self._share(0))

    def learn(self, trial: Trial, state: RunState, carry: Carry) -> Learned:
        """What to run next. Only whole trials of purpose LEARN or PROBE may come here.

        u' = Q((1 - forgetting) u + m (law(u, e) - u)) within limits, u as sent, e the mean error
        over `average_trials` trials, m zero where an input was limited. An experiment that the law
        asks for is only limited. Raises ShapeError or CoreError if the trial may not teach.
        """
        self._check(trial)
        averaged = state.averaged + 1
        memory = state.memories.get("law", {})
        trial, carry = _average(trial, carry, averaged, self._settings.average_trials)
        if averaged < self._settings.average_trials:
            share = float(np.mean(carry.clipped))
            return Learned(carry, memory, trial.purpose, False, averaged, share)
        arrays = {name: array for name, array in carry.law.items() if name != RIG_LIMITED}
        step = self._law.update(trial, state.gain, memory, arrays)
        require_shape("feedforward of the law", step.feedforward, trial.feedforward.shape)
        limited = self._next(step, trial, carry, self._share(state.updates + 1))
        experiment = step.purpose is Purpose.PROBE
        following = Carry(
            feedforward=limited.feedforward,
            clipped=limited.clipped,
            learned=carry.learned if experiment else limited.feedforward,
            mean_error=np.zeros_like(carry.mean_error),
            law=dict(step.arrays),
        )
        share = float(np.mean(limited.clipped))
        return Learned(following, step.memory, step.purpose, True, 0, share)

    def _next(self, step: Step, trial: Trial, carry: Carry, share: float) -> Limited:
        wish = step.feedforward
        if step.purpose is not Purpose.PROBE:
            base = carry.learned if trial.purpose is Purpose.PROBE else trial.feedforward
            increment = step.feedforward - base
            increment[self._masked(increment, base, trial, carry, share)] = 0.0
            increment += (1.0 - self._settings.forgetting) * base
            wish = self._filter.apply(increment)
        return self._limits.apply(wish, previous=trial.feedforward, share=share)

    def _masked(
        self, increment: Array, base: Array, trial: Trial, carry: Carry, share: float
    ) -> Mask:
        """Samples that learn nothing from this trial, so that limits do not wind up.

        Where the rig's actuator was at a limit, the error says nothing about the input. Where our
        own box cut the last wish, only going further out is stopped; a wish beyond the rate has no
        outward direction at a sample and is simply limited again.
        """
        mask = trial.limited
        if carry.clipped.any():
            mask = mask | (carry.clipped & self._limits.pushes_out(base, increment, share))
        return mask

    def _share(self, updates: int) -> float:
        """Share of the box allowed to the feedforward that comes after `updates` updates."""
        trials, first = self._settings.soft_start_trials, self._settings.soft_start_fraction
        return 1.0 if updates >= trials else first + (1.0 - first) * updates / trials

    def _check(self, trial: Trial) -> None:
        n_samples, context = self._context.n_samples, self._context
        require_shape("feedforward", trial.feedforward, (n_samples, context.n_inputs))
        require_shape("limited", trial.limited, (n_samples, context.n_inputs))
        require_shape("reference", trial.reference, (n_samples, context.n_outputs))
        require_shape("output", trial.output, (n_samples, context.n_outputs))
        if trial.purpose not in (Purpose.LEARN, Purpose.PROBE):
            raise CoreError(f"trial {trial.index}: run as {trial.purpose}, so it may not teach")
        n_bad = int(np.count_nonzero(~np.isfinite(trial.output)))
        if n_bad:
            raise CoreError(
                f"trial {trial.index}: expected a whole output, found {n_bad} samples missing or "
                "not finite; such a trial is void and may not teach"
            )


def _average(trial: Trial, carry: Carry, averaged: int, wanted: int) -> tuple[Trial, Carry]:
    """The trial as the law sees it after averaging, and the carry with the running means."""
    if wanted == 1:
        return trial, carry
    mean_error, limited = trial.error, trial.limited
    if averaged > 1:
        mean_error = carry.mean_error + (mean_error - carry.mean_error) / averaged
        limited = limited | (carry.law[RIG_LIMITED] != 0.0)
    law = {**carry.law, RIG_LIMITED: limited.astype(np.float64)}
    mean_trial = replace(trial, output=trial.reference - mean_error, limited=limited)
    return mean_trial, replace(carry, mean_error=mean_error, law=law)
