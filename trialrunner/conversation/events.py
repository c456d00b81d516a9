"""What the conversation with the rig tells the session."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from drivers.messages import Channel, FinishReason, Greeting, RigState


@dataclass(frozen=True)
class RigEvent:
    """Base of all events of the conversation."""


@dataclass(frozen=True)
class Greeted(RigEvent):
    """A session is open and the rig has described itself."""

    greeting: Greeting
    inputs: tuple[Channel, ...]
    outputs: tuple[Channel, ...]
    auxiliary: tuple[Channel, ...]


@dataclass(frozen=True)
class RigRefused(RigEvent):
    """The rig understood an order and did not carry it out."""

    order: str
    code: int
    text: str


@dataclass(frozen=True)
class TrialArmed(RigEvent):
    """Tables verified, rig at its start and armed, clock exchanged."""

    trial: int
    start_state: tuple[float, ...]


@dataclass(frozen=True)
class TrialDisarmed(RigEvent):
    """No trial will start until the next one is prepared."""


@dataclass(frozen=True)
class TrialStarted(RigEvent):
    trial: int
    tick: int


@dataclass(frozen=True)
class SamplesArrived(RigEvent):
    """Samples `first` to `first + count - 1` of the running trial are in."""

    first: int
    count: int
    rows: NDArray[np.float64]
    """(count or count + 1, n_outputs + n_auxiliary): from the sample before `first` on, if there
    is one; NaN where it has not arrived."""

    @property
    def first_row(self) -> int:
        """Number of the sample in row 0."""
        return max(self.first - 1, 0)


@dataclass(frozen=True)
class TrialFinished(RigEvent):
    trial: int


@dataclass(frozen=True)
class Collected(RigEvent):
    """Everything of a trial that will ever arrive."""

    trial: int
    samples: NDArray[np.float64]
    """(n_samples, n_outputs + n_auxiliary); NaN where nothing arrived."""
    reason: FinishReason
    count: int
    start_tick: int
    start_state: tuple[float, ...]
    feedforward_crc: int
    asked_again: int
    whole: bool
    """All samples arrived and their checksum agrees with the rig's."""


@dataclass(frozen=True)
class RigChanged(RigEvent):
    """The rig's heartbeat tells of a new state."""

    state: RigState


@dataclass(frozen=True)
class RigFaulted(RigEvent):
    """The rig is in its safe state until a person says otherwise."""

    code: int
    text: str


@dataclass(frozen=True)
class RigCleared(RigEvent):
    """The rig left its safe state."""


@dataclass(frozen=True)
class RigSilent(RigEvent):
    """Nothing valid was heard for too long, or an order was never answered."""

    text: str


@dataclass(frozen=True)
class SessionClosed(RigEvent):
    """The rig acknowledged the goodbye."""
