"""What every plant offers: channels, a start, and one step a sample; pure."""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

TICK_HZ = 1_000_000


@dataclass(frozen=True)
class ChannelInfo:
    name: str
    unit: str
    low: float
    high: float
    rate_per_s: float = math.inf
    meaning: str = ""


@dataclass(frozen=True)
class Disturbance:
    """What the fault script changes in the plant for one trial; by default nothing."""

    gain: float = 1.0
    """Factor on the feedforward's effect; negative: an actuator of the wrong sign."""
    extra_delay: int = 0
    """Samples by which the feedforward acts later."""
    friction: float = 1.0
    """Factor on the dry friction of an axis; on the loss of heat of the chamber, above 0."""
    resonance: float = 0.0
    """Size of an added lightly damped resonance in the response to the feedforward."""
    load_limit: float = 1.0
    """Factor on the actuator's saturation."""
    noise: float = 1.0
    """Factor on everything that differs from trial to trial."""
    offset: tuple[float, ...] = ()
    """Added to the start of each output."""


class Plant(Protocol):
    name: str
    period_ticks: int
    inject: str
    return_s: float
    inputs: tuple[ChannelInfo, ...]
    outputs: tuple[ChannelInfo, ...]
    auxiliary: tuple[ChannelInfo, ...]

    def begin(
        self, trial: int, reference0: Sequence[float], disturbance: Disturbance
    ) -> Sequence[float]:
        """Go to the start of a trial; where it really stands, one number for each output."""

    def step(
        self, feedforward: Sequence[float], reference: Sequence[float]
    ) -> tuple[list[float], list[float]]:
        """Outputs and auxiliary channels of this sample; then move for one period."""
