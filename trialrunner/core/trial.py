"""What one trial is made of, and what a guard says about it."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import IntEnum, StrEnum
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]


class Purpose(StrEnum):
    """Why a trial is run. Only LEARN trials change the feedforward."""

    BASELINE = "baseline"
    """Learning frozen before the first update, to measure variation from trial to trial."""
    LEARN = "learn"
    PROBE = "probe"
    """An experiment that a law asked for; its feedforward is not the learned one."""
    CONFIRM = "confirm"
    """Frozen repeats after a roll back."""
    FLOOR = "floor"
    """Frozen repeats of the last feedforward, to measure the repeatability floor."""


@dataclass(frozen=True)
class Trial:
    """One run of the rig as measured; arrays are read-only by agreement.

    Samples that did not arrive are NaN in `output` and `auxiliary`.
    """

    index: int
    purpose: Purpose
    feedforward: Array
    """(n_samples, n_inputs), as sent: after limits and wire quantisation."""
    reference: Array
    """(n_samples, n_outputs)."""
    output: Array
    """(n_samples, n_outputs), as measured."""
    auxiliary: Array
    """(n_samples, n_auxiliary)."""
    limited: Mask
    """(n_samples, n_inputs): true where the actuator was at a limit, as the rig reported."""
    start_state: Array
    """(n_outputs,): where the rig stood at sample 0."""
    start_lateness_s: float = 0.0
    """Actual minus ordered start; 0 where the rig itself starts."""
    finish: str = "complete"
    """Lower-case name of the rig's finish reason."""
    count: int = -1
    """Samples that the rig says it took; -1 stands for all."""
    played_ok: bool = True
    """The rig's checksum of the table it played agrees with the table sent."""
    asked_again: int = 0
    """Samples that had to be asked for again."""

    @cached_property
    def error(self) -> Array:
        """r - y, (n_samples, n_outputs); computed once, because every guard asks for it."""
        return self.reference - self.output

    @cached_property
    def output_rows(self) -> Array:
        """(n_outputs, n_samples): the output, one channel a row, for what goes along time."""
        return np.ascontiguousarray(self.output.T)


class Level(IntEnum):
    """The verdict ladder, mildest first."""

    PASS = 0
    WARN = 1
    FREEZE = 2
    ROLL_BACK = 3
    HALT = 4

    @property
    def word(self) -> str:
        return self.name.lower().replace("_", " ")


@dataclass(frozen=True)
class Verdict:
    """What one guard says of one trial: one sentence with the number and the limit in it."""

    guard: str
    level: Level
    reason: str = ""
    value: float = 0.0
    limit: float = 0.0
    void: bool = False
    """The trial may not teach and is repeated with the same feedforward."""


Memory = Mapping[str, float | int | str | list[float]]
"""What a guard or law remembers between trials: small and exactly representable in JSON."""


@dataclass(frozen=True)
class GuardResult:
    verdict: Verdict
    memory: Memory = field(default_factory=dict)
