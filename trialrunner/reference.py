"""The reference of a run: computed from waypoints, read from a file, or held by the rig."""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, ClassVar, Literal

from annotated_types import Ge, Le, MinLen

from trialrunner.channel_file import Column, read_channels
from trialrunner.core.bounds import STRICT, Name, NonNegative, Positive
from trialrunner.core.profiles import point_to_point
from trialrunner.core.settings import Horizon, InputChannel, OutputChannel
from trialrunner.core.trial import Array

Checksum = Annotated[int, Ge(0), Le(0xFFFF_FFFF)]

Limit = Positive | tuple[Positive, ...]
Waypoint = Annotated[tuple[float, ...], MinLen(1)]


@dataclass(frozen=True, kw_only=True)
class ProfileReference:
    """The reference is a point-to-point profile, all outputs in step and at rest at each waypoint.
    A limit is one number for all outputs, or one for each."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    kind: Literal["profile"]
    """A profile computed from waypoints."""
    waypoints: Annotated[tuple[Waypoint, ...], MinLen(1)]
    """Points to visit one after the other, each with one coordinate for each output, in the
    outputs' units; the trial starts at the first and rests at the last."""
    velocity_limit_per_s: Limit
    """Largest velocity, in the output's unit per second."""
    acceleration_limit_per_s2: Limit = math.inf
    """Largest acceleration, in the output's unit per second squared."""
    jerk_limit_per_s3: Limit = math.inf
    """Largest jerk, in the output's unit per second cubed."""
    snap_limit_per_s4: Limit = math.inf
    """Largest snap, in the output's unit per second to the fourth."""
    dwell_s: NonNegative | tuple[NonNegative, ...] = 0.0
    """Rest at each waypoint, the first and the last included; one number, or one for each."""


@dataclass(frozen=True, kw_only=True)
class FileReference:
    """The reference is read from a file."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    kind: Literal["file"]
    """Values from a CSV or NPZ file."""
    path: Name
    """CSV or NPZ file, relative to the configuration file."""
    columns: tuple[Name, ...] = ()
    """Column or array for each output, in their order; the outputs' names if left out."""


@dataclass(frozen=True, kw_only=True)
class RigReference:
    """The rig owns the reference; the daemon checks that it is the expected one."""

    __pydantic_config__: ClassVar[dict[str, Any]] = STRICT

    kind: Literal["rig"]
    """Held by the rig and confirmed by its checksum."""
    checksum: Checksum
    """CRC-32C of the rig's reference table, as its greeting gives it; 0x1234abcd is understood."""
    path: Name
    """CSV or NPZ file with the same values, from which errors are computed, relative to the
    configuration file."""
    columns: tuple[Name, ...] = ()
    """Column or array for each output, in their order; the outputs' names if left out."""


def load_reference(
    settings: ProfileReference | FileReference | RigReference,
    outputs: Sequence[OutputChannel],
    horizon: Horizon,
    folder: Path,
) -> Array:
    """The reference, (n_samples, n_outputs), in the outputs' units; not rounded to the wire.

    Raises ChannelFileError for a file that does not hold it, SettingError for a profile that does
    not fit the trial.
    """
    if isinstance(settings, ProfileReference):
        return point_to_point(
            settings.waypoints,
            velocity_limit_per_s=settings.velocity_limit_per_s,
            acceleration_limit_per_s2=settings.acceleration_limit_per_s2,
            jerk_limit_per_s3=settings.jerk_limit_per_s3,
            snap_limit_per_s4=settings.snap_limit_per_s4,
            dwell_s=settings.dwell_s,
            period_s=horizon.period_s,
            n_samples=horizon.n_samples,
        )
    names = settings.columns or tuple(one.name for one in outputs)
    columns = [Column(name, one.unit) for name, one in zip(names, outputs, strict=True)]
    return read_channels(folder / settings.path, columns, horizon.n_samples)


def load_feedforward(path: Path, inputs: Sequence[InputChannel], n_samples: int) -> Array:
    """A first feedforward from a file with the inputs' names, (n_samples, n_inputs).

    Raises ChannelFileError.
    """
    return read_channels(path, [Column(one.name, one.unit) for one in inputs], n_samples)
