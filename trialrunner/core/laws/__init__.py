"""Learning laws: one file each behind one contract, listed in `law_table`.

To add a law: a settings dataclass with `kind` and `build`, a class with `update`, and a row there.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np

from trialrunner.core.errors import SettingError
from trialrunner.core.plant_model import PlantModel
from trialrunner.core.settings import RunSettings
from trialrunner.core.trial import Array, Memory, Purpose, Trial


@dataclass(frozen=True)
class LawContext:
    """What a law may know of the run when it is built."""

    period_s: float
    n_samples: int
    n_inputs: int
    n_outputs: int
    reference: Array
    """(n_samples, n_outputs)."""
    low: Array
    """(n_inputs,): lower box limit, the tighter of configuration and rig."""
    high: Array
    """(n_inputs,)."""
    rate_per_s: Array
    """(n_inputs,): rate limit; infinity where there is none."""
    plant: PlantModel | None = None
    """From the table [model]; None if there is none."""

    @classmethod
    def of(cls, settings: RunSettings, reference: Array, plant: PlantModel | None) -> "LawContext":
        """What the settings say; the limits are those of their inputs."""
        inputs = settings.inputs
        return cls(
            period_s=settings.horizon.period_s,
            n_samples=settings.horizon.n_samples,
            n_inputs=len(inputs),
            n_outputs=len(settings.outputs),
            reference=reference,
            low=np.array([channel.low for channel in inputs]),
            high=np.array([channel.high for channel in inputs]),
            rate_per_s=np.array([channel.rate_limit_per_s for channel in inputs]),
            plant=plant,
        )


@dataclass(frozen=True)
class Step:
    """A law's answer to a trial."""

    feedforward: Array
    """(n_samples, n_inputs): the raw next feedforward, before filter and limits."""
    purpose: Purpose = Purpose.LEARN
    """PROBE when the next trial is an experiment of the law's own."""
    memory: Memory = field(default_factory=dict)
    arrays: Mapping[str, Array] = field(default_factory=dict)
    """Arrays to hand back at the next update; recorded with the trial."""


class Law(Protocol):
    def update(
        self, trial: Trial, gain: float, memory: Memory, arrays: Mapping[str, Array]
    ) -> Step:
        """The raw next feedforward.

        `gain` scales the learning (1 unless a guard reduced it). `memory` and `arrays` are those
        of the last Step, empty at first. Deterministic; starts from `trial.feedforward`.
        """


class LawSettings(Protocol):
    kind: str

    def build(self, context: LawContext) -> Law:
        """Raises SettingError if the settings do not fit the channels or the horizon."""


def required_plant(context: LawContext, kind: str) -> PlantModel:
    """The plant model. Raises SettingError if there is none or its channels are not the run's."""
    plant = context.plant
    if plant is None:
        raise SettingError(
            f"law.kind: {kind} expected a plant model, found none; add a table [model]"
        )
    found = (plant.n_inputs, plant.n_outputs)
    if found != (context.n_inputs, context.n_outputs):
        raise SettingError(
            f"model: expected {context.n_inputs} inputs and {context.n_outputs} outputs as the run "
            f"has, found {found[0]} and {found[1]}"
        )
    return plant


def law_table() -> dict[str, type[Any]]:
    """Settings class of each law by its `kind`; imported late because laws may be heavy."""
    from trialrunner.core.laws.gradient import GradientSettings
    from trialrunner.core.laws.inverse import InverseSettings
    from trialrunner.core.laws.norm_optimal import NormOptimalSettings
    from trialrunner.core.laws.pd import PdSettings

    return {
        "pd": PdSettings,
        "inverse": InverseSettings,
        "gradient": GradientSettings,
        "norm_optimal": NormOptimalSettings,
    }
