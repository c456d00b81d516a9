"""Settings of the pure part: frozen, named with units, checked when read from a file."""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, ClassVar, Literal

from trialrunner.core.bounds import (
    STRICT,
    AboveOne,
    BelowOne,
    Count,
    Fraction,
    Name,
    NonNegative,
    Positive,
    PositiveCount,
    PositiveFraction,
)


@dataclass(frozen=True, kw_only=True)
class InputChannel:
    """One channel of the feedforward and what may be sent on it."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    name: Name
    """As the rig calls it."""
    unit: Name
    """UCUM code, as the rig declares it."""
    low: float
    """Smallest value that may be sent, in the channel's unit."""
    high: float
    """Largest value that may be sent."""
    rate_limit_per_s: Positive = math.inf
    """Largest change per second between samples."""
    change_cap: Positive = math.inf
    """Largest change of any sample from one trial to the next."""
    pin_start: bool = True
    """The feedforward starts at zero, reached within the rate limit."""
    pin_end: bool = True
    """The feedforward ends at zero, approached within the rate limit."""


@dataclass(frozen=True, kw_only=True)
class OutputChannel:
    """One measured channel that is to follow the reference."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    name: Name
    """As the rig calls it."""
    unit: Name
    """UCUM code, as the rig declares it."""
    low: float
    """Smallest measurement that is believed, in the channel's unit."""
    high: float
    """Largest measurement that is believed."""
    scale: Positive = 1.0
    """Error of this size counts as 1 in the error norm: makes channels of different units
    comparable."""
    start_tolerance: Positive = math.inf
    """Largest distance from the start of the reference at which a trial may start."""


@dataclass(frozen=True, kw_only=True)
class Horizon:
    """The trial."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    n_samples: PositiveCount
    """Samples of one trial."""
    period_s: Positive
    """Time between samples, as the rig declares it."""
    start: Literal["daemon", "rig"] = "daemon"
    """Who starts an armed trial."""
    dwell_s: NonNegative = 0.0
    """Rest between the rig's return and the next start."""
    inject: Literal["actuator", "reference"] = "actuator"
    """Where the feedforward enters: the actuator command or the rig's own loop's reference."""


@dataclass(frozen=True, kw_only=True)
class FilterSettings:
    """The Q-filter: zero-phase, norm 1, on the DCT-II."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    shape: Literal["butterworth", "gaussian", "none"] = "gaussian"
    """Magnitude over frequency: steep or without ringing in time; none does not filter."""
    bandwidth_hz: Positive = math.inf
    """Frequency at which the magnitude is -3 dB."""
    order: PositiveCount = 2
    """Butterworth only: roll-off of 20 dB a decade for each order."""


@dataclass(frozen=True, kw_only=True)
class LearnSettings:
    """What surrounds the law."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    forgetting: BelowOne = 0.0
    """Share of the feedforward forgotten at each update."""
    average_trials: PositiveCount = 1
    """Trials with the same feedforward whose mean error makes one update."""
    limit_method: Literal["clamp", "envelope", "projection"] = "envelope"
    """How a feedforward beyond its limits is brought inside."""
    soft_start_trials: Count = 0
    """Trials over which the allowed feedforward rises to its full limits."""
    soft_start_fraction: PositiveFraction = 0.25
    """Share of the limits allowed in the first of them."""
    update_deadline_s: Positive = 5.0
    """When the update is not ready by then, the last feedforward is sent again."""


@dataclass(frozen=True, kw_only=True)
class LadderSettings:
    """What follows a verdict."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    roll_back_to: Literal["best", "last_good"] | Count = "best"
    """Feedforward that a roll back returns to: of the best trial, of the last one without any
    complaint, or of a numbered trial."""
    gain_factor: PositiveFraction = 0.5
    """Gain after a roll back, as a share of the gain before."""
    min_gain: PositiveFraction = 0.05
    """The gain is not reduced below this share of the configured one."""
    confirm_trials: Count = 2
    """Frozen trials after a roll back that must come back to the old error."""
    confirm_ratio: AboveOne = 1.5
    """Largest error in a confirmation trial as a multiple of the error returned to."""
    max_roll_backs: Count = 3
    """One more halts the run."""
    max_voids_in_row: PositiveCount = 3
    """One more void trial in a row halts the run."""
    resume_after_trials: Count = 5
    """Trials without complaint after which a guard's freeze ends; 0: only an operator ends it."""


@dataclass(frozen=True, kw_only=True)
class StopSettings:
    """When a run is over, and what is measured before it ends."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    trials: PositiveCount = 100
    """Trials that count, floor trials not included."""
    tolerance: NonNegative = 0.0
    """Stop when the error norm is at most this; 0: off."""
    stall_trials: Count = 0
    """Stop when the best error norm has not improved for this many trials; 0: off."""
    stall_improvement: Fraction = 0.02
    """Smaller improvements than this share do not count as improvement."""
    baseline_trials: Count = 0
    """Frozen trials before learning starts."""
    floor_trials: Count = 5
    """Frozen repeats of the last feedforward at the end, to measure the repeatability floor."""


@dataclass(frozen=True, kw_only=True)
class RunSettings:
    """Everything that the pure part needs to know of a run."""

    horizon: Horizon
    inputs: tuple[InputChannel, ...]
    outputs: tuple[OutputChannel, ...]
    law: Any
    """A settings value from laws.law_table()."""
    filter: FilterSettings = field(default_factory=FilterSettings)
    learn: LearnSettings = field(default_factory=LearnSettings)
    guards: Mapping[str, Any] = field(default_factory=dict)
    """Settings value of each guard by name, from guards.guard_table()."""
    ladder: LadderSettings = field(default_factory=LadderSettings)
    stop: StopSettings = field(default_factory=StopSettings)
    auxiliary: tuple[str, ...] = ()
    """Names of the rig's auxiliary channels in its order; empty where they are not known."""
    model: Any = None
    """Settings value of the plant model, from plant_model; None if there is none."""
