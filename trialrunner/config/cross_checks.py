"""Settings that are each allowed and do not fit together."""

import math
from collections.abc import Iterable, Iterator, Sequence

from drivers.errors import LinkError
from drivers.limits import MAX_SAMPLES, MAX_TEXT_BYTES, MAX_UNIT_BYTES
from drivers.open import DAEMON, schemes
from trialrunner.channel_file import ChannelFileError
from trialrunner.config.lines import Path as KeyPath
from trialrunner.config.model import Config
from trialrunner.config.problems import Problem
from trialrunner.core.errors import CoreError
from trialrunner.core.guards import ChecksChannels
from trialrunner.core.laws import LawContext
from trialrunner.core.plant_model import build_plant
from trialrunner.core.settings import InputChannel, OutputChannel
from trialrunner.core.trial import Array
from trialrunner.reference import ProfileReference


def fit_problems(config: Config) -> list[Problem]:
    """What does not fit, judged by the settings alone."""
    return [
        *_channel_problems("inputs", config.inputs),
        *_channel_problems("outputs", config.outputs),
        *_box_problems(config.inputs),
        *_horizon_problems(config),
        *_reference_shape_problems(config),
        *_address_problems(config),
        *_guard_problems(config),
    ]


def file_problems(config: Config, *, with_files: bool) -> list[Problem]:
    """What does not fit once the reference is known; reads files only if told to."""
    problems: list[Problem] = []
    if with_files or isinstance(config.reference, ProfileReference):
        problems += _reference_problems(config)
    if with_files:
        problems += _feedforward_problems(config)
    return problems


def warnings(config: Config) -> list[Problem]:
    """What is allowed and probably not meant."""
    return [
        *_filter_warnings(config),
        *_pin_warnings(config),
        *_guard_warnings(config),
    ]


def _channel_problems(
    table: str, channels: Sequence[InputChannel | OutputChannel]
) -> Iterator[Problem]:
    first: dict[str, int] = {}
    for index, channel in enumerate(channels):
        if channel.name in first:
            text = (
                f"{channel.name!r} is the name of {table}.{first[channel.name]} too; names differ"
            )
            yield Problem((table, index, "name"), text)
        first.setdefault(channel.name, index)
        for key, most in (("name", MAX_TEXT_BYTES), ("unit", MAX_UNIT_BYTES)):
            found = len(getattr(channel, key).encode())
            if found > most:
                text = f"expected at most {most} bytes, as the protocol allows, found {found}"
                yield Problem((table, index, key), text)
        if not channel.low < channel.high:
            text = f"expected a number above low = {channel.low:g}, found {channel.high:g}"
            yield Problem((table, index, "high"), text)


def _box_problems(inputs: Sequence[InputChannel]) -> Iterator[Problem]:
    for index, channel in enumerate(inputs):
        if channel.low < channel.high and not channel.low <= 0 <= channel.high:
            key = "low" if channel.low > 0 else "high"
            text = (
                f"the limits {channel.low:g} to {channel.high:g} {channel.unit} must contain 0: "
                "the feedforward is added to the rig's own command and starts at 0"
            )
            yield Problem(("inputs", index, key), text)


def _horizon_problems(config: Config) -> Iterator[Problem]:
    if config.trial.n_samples > MAX_SAMPLES:
        text = f"expected at most {MAX_SAMPLES} samples, as the protocol allows"
        yield Problem(("trial", "n_samples"), f"{text}, found {config.trial.n_samples}")


def _reference_shape_problems(config: Config) -> Iterator[Problem]:
    reference, n_outputs = config.reference, len(config.outputs)
    if not isinstance(reference, ProfileReference):
        found = len(reference.columns)
        if found not in (0, n_outputs):
            yield _count_problem(("reference", "columns"), n_outputs, found)
        return
    for index, waypoint in enumerate(reference.waypoints):
        if len(waypoint) != n_outputs:
            yield _count_problem(("reference", "waypoints", index), n_outputs, len(waypoint))


def _count_problem(path: KeyPath, expected: int, found: int) -> Problem:
    return Problem(path, f"expected one entry for each of the {expected} outputs, found {found}")


def _address_problems(config: Config) -> Iterator[Problem]:
    scheme, mark, _ = config.link.url.partition("://")
    if not mark or scheme not in schemes(DAEMON):
        known = ", ".join(f"{one}://" for one in schemes(DAEMON))
        yield Problem(("link", "url"), f"expected one of {known}, found {config.link.url!r}")
    elif scheme == "serial":
        yield from _serial_problems(config.link.url)
    for key in ("command_url", "telemetry_url"):
        yield from _socket_problems(key, getattr(config, key))
    if config.command_url == config.telemetry_url:
        text = f"the same address as operator.command_url: {config.command_url}"
        yield Problem(("operator", "telemetry_url"), text)


def _serial_problems(url: str) -> Iterator[Problem]:
    from drivers.serial_link import parse_serial_url

    try:
        parse_serial_url(url)
    except LinkError as error:
        yield Problem(("link", "url"), str(error))


def _socket_problems(key: str, url: str) -> Iterator[Problem]:
    from trialrunner.local_address import AddressError, socket_path

    try:
        socket_path(url)
    except AddressError as error:
        yield Problem(("operator", key), str(error))


def _guard_problems(config: Config) -> Iterator[Problem]:
    for name, guard in config.guard_settings().items():
        if isinstance(guard, ChecksChannels):
            try:
                guard.check_channels(config.outputs)
            except CoreError as error:
                yield _core_problem(error, ("guards", name))


def _core_problem(error: Exception, default: KeyPath) -> Problem:
    """The core begins its texts with the setting's dotted path, where one setting is to blame."""
    setting, _, text = str(error).partition(": ")
    parts = setting.split(".")
    if parts[0] == default[0] and " " not in setting:
        return Problem(tuple(int(one) if one.isdecimal() else one for one in parts), text)
    return Problem(default, str(error))


# --- once the reference is known --------------------------------------------------------------


def _reference_problems(config: Config) -> list[Problem]:
    place = "waypoints" if isinstance(config.reference, ProfileReference) else "path"
    try:
        reference = config.load_reference()
    except (ChannelFileError, CoreError) as error:
        return [_core_problem(error, ("reference", place))]
    outside = list(_range_problems(config.outputs, reference, place))
    return outside or _law_problems(config, reference)


def _range_problems(
    outputs: Sequence[OutputChannel], reference: Array, place: str
) -> Iterator[Problem]:
    for column, channel in enumerate(outputs):
        low, high = float(reference[:, column].min()), float(reference[:, column].max())
        if low < channel.low or high > channel.high:
            text = (
                f"goes from {low:g} to {high:g} {channel.unit} on {channel.name!r}; expected "
                f"within that output's range, {channel.low:g} to {channel.high:g}"
            )
            yield Problem(("reference", place), text)


def _law_problems(config: Config, reference: Array) -> list[Problem]:
    """Whether the law accepts the channels and the horizon; it knows best itself."""
    try:
        plant = build_plant(config.model, config.trial.period_s)
    except CoreError as error:
        return [_core_problem(error, ("model",))]
    try:
        config.law.build(LawContext.of(config.run_settings(), reference, plant))
    except CoreError as error:
        return [_core_problem(error, ("law",))]
    return []


def _feedforward_problems(config: Config) -> Iterable[Problem]:
    path: KeyPath = ("run", "initial_feedforward")
    try:
        feedforward = config.load_feedforward()
    except ChannelFileError as error:
        return [_core_problem(error, path)]
    if feedforward is None:
        return []
    return [
        Problem(path, f"leaves the limits {one.low:g} to {one.high:g} {one.unit} of {one.name!r}")
        for column, one in enumerate(config.inputs)
        if feedforward[:, column].min() < one.low or feedforward[:, column].max() > one.high
    ]


# --- warnings ---------------------------------------------------------------------------------


def _filter_warnings(config: Config) -> Iterator[Problem]:
    nyquist_hz = 0.5 / config.trial.period_s
    bandwidth_hz = config.filter.bandwidth_hz
    # Resolution of the DCT-II over the horizon: below it only the mean would pass.
    resolution_hz = nyquist_hz / config.trial.n_samples
    if config.filter.shape == "none":
        if math.isfinite(bandwidth_hz):
            yield Problem(("filter", "bandwidth_hz"), 'has no effect with shape = "none"')
    elif bandwidth_hz >= nyquist_hz:
        text = (
            f"the Q-filter hardly filters: bandwidth {bandwidth_hz:g} Hz, half the sampling rate "
            f"{nyquist_hz:g} Hz; noise and unmodelled dynamics are learned up to there"
        )
        yield Problem(("filter", "bandwidth_hz"), text)
    elif bandwidth_hz < resolution_hz:
        text = f"passes little more than the mean: one trial resolves {resolution_hz:g} Hz"
        yield Problem(("filter", "bandwidth_hz"), text)


def _pin_warnings(config: Config) -> Iterator[Problem]:
    duration_s = (config.trial.n_samples - 1) * config.trial.period_s
    for index, one in enumerate(config.inputs):
        ends = one.pin_start + one.pin_end
        if not ends or math.isinf(one.rate_limit_per_s):
            continue
        reach = one.rate_limit_per_s * duration_s / ends
        wanted = min(-one.low, one.high) or max(-one.low, one.high)
        if reach < wanted:
            text = (
                f"from the pinned ends the feedforward reaches {reach:g} {one.unit} at most, not "
                f"its limit {wanted:g}: raise the rate or lower the limit"
            )
            yield Problem(("inputs", index, "rate_limit_per_s"), text)


def _guard_warnings(config: Config) -> Iterator[Problem]:
    for name, guard in config.guard_settings().items():
        if not guard.enabled:
            yield Problem(("guards", name, "enabled"), "this guard is off")
