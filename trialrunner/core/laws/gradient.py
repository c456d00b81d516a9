"""Gradient law: u' = u + gain * step * 2 / ||G||^2 * G' e.

Steepest descent on ||e||^2 (Furuta and Yamakita 1987, from memory); the error falls from trial to
trial for any step between 0 and 1 if the model is right, and where the model is wrong by less than
90 degrees for a step that is small enough.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar, Literal

from trialrunner.core.bounds import STRICT, InsideUnit
from trialrunner.core.errors import SettingError
from trialrunner.core.laws import LawContext, Step, required_plant
from trialrunner.core.lifted import Lifted, norm
from trialrunner.core.trial import Array, Memory, Trial


@dataclass(frozen=True, kw_only=True)
class GradientSettings:
    """A gradient law; needs the table [model]."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    kind: Literal["gradient"] = "gradient"
    step: InsideUnit = 0.5
    """Fraction of the largest step with which the error still falls, 2 / ||G||^2."""

    def build(self, context: LawContext) -> "GradientLaw":
        """Raises SettingError without a model that fits."""
        plant = required_plant(context, self.kind)
        lifted = Lifted(plant.impulse_response(context.n_samples))
        gain = norm(lifted)
        if gain == 0.0:
            raise SettingError(
                f"model: expected an answer within the {context.n_samples} samples of a trial, "
                "found none; check its delay and gain"
            )
        return GradientLaw(lifted, 2.0 * self.step / gain**2)


class GradientLaw:
    """Built by GradientSettings. Keeps nothing between trials."""

    def __init__(self, lifted: Lifted, factor: float) -> None:
        self._lifted = lifted
        self.factor = factor

    def update(
        self, trial: Trial, gain: float, memory: Memory, arrays: Mapping[str, Array]
    ) -> Step:
        correction = self._lifted.adjoint(trial.error)
        correction *= gain * self.factor
        return Step(trial.feedforward + correction)
