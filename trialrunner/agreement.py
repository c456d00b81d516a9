"""Whether the rig that answers is the one that the configuration describes; pure."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from drivers.messages import Channel, Greeting, Role, StartMode
from drivers.tables import table_crc
from trialrunner.config import Config
from trialrunner.core.settings import InputChannel, OutputChannel
from trialrunner.core.trial import Array
from trialrunner.reference import RigReference

PERIOD_TOLERANCE = 1e-9
"""Relative; a period written in decimal and one in ticks agree to rounding."""

HEARTBEATS_PER_WATCHDOG = 4
"""The rig speaks at least every quarter of its watchdog time (PROTOCOL.md)."""


@dataclass(frozen=True)
class LimitsInForce:
    """What may be sent: for each input the tighter of configuration and rig."""

    low: Array
    """(n_inputs,)."""
    high: Array
    """(n_inputs,)."""
    rate_per_s: Array
    """(n_inputs,); infinity where neither side has a limit."""


def limits_in_force(config: Config, channels: Sequence[Channel]) -> LimitsInForce:
    """The tighter of both sides' limits, for a rig that agrees with the configuration.

    `channels` are the rig's, of all roles.
    """
    pairs = list(zip(config.inputs, of_role(channels, Role.INPUT), strict=True))
    return LimitsInForce(
        low=np.array([max(ours.low, rig.low) for ours, rig in pairs]),
        high=np.array([min(ours.high, rig.high) for ours, rig in pairs]),
        rate_per_s=np.array([min(ours.rate_limit_per_s, rig.rate_per_s) for ours, rig in pairs]),
    )


def of_role(channels: Sequence[Channel], role: Role) -> list[Channel]:
    """The channels of one role in the rig's order."""
    return sorted((one for one in channels if one.role == role), key=lambda one: one.index)


def agree(config: Config, greeting: Greeting, channels: Sequence[Channel]) -> list[str]:
    """Everything in which rig and configuration disagree, as `setting: expected, found, remedy`.

    `channels` are the rig's, of all roles. Empty if the run may start.
    """
    inputs = of_role(channels, Role.INPUT)
    outputs = of_role(channels, Role.OUTPUT)
    return [
        *_channel_disagreements("inputs", config.inputs, inputs),
        *_channel_disagreements("outputs", config.outputs, outputs),
        *_box_disagreements(config, inputs),
        *_trial_disagreements(config, greeting),
        *_reference_disagreements(config, greeting),
        *_patience_disagreements(config, greeting),
    ]


def _channel_disagreements(
    table: str, ours: Sequence[InputChannel | OutputChannel], rig: Sequence[Channel]
) -> Iterator[str]:
    our_names, rig_names = [one.name for one in ours], [one.name for one in rig]
    if our_names != rig_names:
        text = f"{table}: the rig has {_listed(rig_names)}, the configuration {_listed(our_names)}"
        if sorted(our_names) == sorted(rig_names):
            text += "; put the tables into the rig's order"
        yield text
    by_name = {one.name: one for one in rig}
    for index, channel in enumerate(ours):
        match = by_name.get(channel.name)
        if match is not None and match.unit != channel.unit:
            yield (
                f"{table}.{index}.unit: {channel.name} is in {match.unit!r} on the rig, in "
                f"{channel.unit!r} in the configuration; convert the numbers, then the unit"
            )


def _listed(names: Sequence[str]) -> str:
    return ", ".join(names) or "none"


def _box_disagreements(config: Config, rig: Sequence[Channel]) -> Iterator[str]:
    by_name = {one.name: one for one in rig}
    for index, ours in enumerate(config.inputs):
        match = by_name.get(ours.name)
        if match is None or match.unit != ours.unit:
            continue
        low, high = max(ours.low, match.low), min(ours.high, match.high)
        if not low <= 0 <= high or low >= high:
            yield (
                f"inputs.{index}: {ours.name} may go from {match.low:g} to {match.high:g} "
                f"{ours.unit} on the rig, from {ours.low:g} to {ours.high:g} in the configuration; "
                "what is left must be a range that contains 0"
            )


def _trial_disagreements(config: Config, greeting: Greeting) -> Iterator[str]:
    trial = config.trial
    period_s = greeting.period_ticks / greeting.tick_hz
    if abs(period_s - trial.period_s) > PERIOD_TOLERANCE * period_s:
        yield (
            f"trial.period_s: the rig samples every {period_s:.9g} s, the configuration says "
            f"{trial.period_s:.9g} s"
        )
    if trial.n_samples > greeting.max_samples:
        yield (
            f"trial.n_samples: the rig takes trials of at most {greeting.max_samples} samples, the "
            f"configuration asks for {trial.n_samples}"
        )
    if StartMode[trial.start.upper()] not in greeting.starts:
        offered = [StartMode(one).name.lower() for one in greeting.starts if one in set(StartMode)]
        yield (
            f"trial.start: the rig offers {_listed(offered)}, the configuration says {trial.start}"
        )
    if trial.inject != greeting.inject:
        yield (
            f"trial.inject: the rig adds the feedforward to its {greeting.inject}, the "
            f"configuration says {trial.inject}"
        )


def _reference_disagreements(config: Config, greeting: Greeting) -> Iterator[str]:
    ours = config.reference
    owner = "rig" if isinstance(ours, RigReference) else "daemon"
    if greeting.reference_owner != owner:
        yield (
            f"reference.kind: the {greeting.reference_owner} owns the reference according to the "
            f"rig, the {owner} according to kind = {ours.kind!r}"
        )
        return
    if not isinstance(ours, RigReference):
        return
    if ours.checksum != greeting.reference_crc:
        yield (
            f"reference.checksum: the rig's reference has the checksum "
            f"0x{greeting.reference_crc:08x}, expected 0x{ours.checksum:08x}; it holds another "
            "reference than the one that errors would be computed from"
        )
        return
    data = np.ascontiguousarray(config.load_reference(), dtype=f"<{greeting.sample_type}")
    found = table_crc(data.tobytes())
    if found != greeting.reference_crc:
        yield (
            f"reference.path: the samples in {ours.path} have the checksum 0x{found:08x} as "
            f"{greeting.sample_type}, the rig's reference 0x{greeting.reference_crc:08x}; errors "
            "would be computed from another reference than the rig follows"
        )


def _patience_disagreements(config: Config, greeting: Greeting) -> Iterator[str]:
    heartbeat_s = greeting.watchdog_ms / 1000 / HEARTBEATS_PER_WATCHDOG
    if config.link.silence_s <= heartbeat_s:
        yield (
            f"link.silence_s: the rig may be silent for {heartbeat_s:g} s between heartbeats, the "
            f"configuration gives it up after {config.link.silence_s:g} s; expected several times "
            "more"
        )
