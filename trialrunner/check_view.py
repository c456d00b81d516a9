"""What a configuration means, as tables for people; shown by `trialrunner check`."""

import math
from collections.abc import Iterator
from dataclasses import MISSING, fields
from typing import Any

import numpy as np
from rich.console import Console, Group, RenderableType
from rich.table import Table
from rich.text import Text

from drivers.messages import Channel
from trialrunner.config import Config
from trialrunner.core.guards import guard_table
from trialrunner.core.trial import Array
from trialrunner.link_check import LinkFinding
from trialrunner.reference import ProfileReference


def show_config(console: Console, config: Config) -> None:
    """Print everything that was understood; reads no file that `load` has not read already."""
    console.print(_facts("Run", _run_facts(config)))
    console.print(_inputs(config))
    console.print(_outputs(config))
    console.print(_reference(config))
    console.print(_facts("Learning (* not the default)", _learning_facts(config)))
    console.print(_guards(config))
    console.print(_facts("Verdicts and end", _ending_facts(config)))
    for warning in config.warnings:
        console.print(Text(f"warning: {warning}", style="yellow"))


def show_finding(console: Console, config: Config, found: LinkFinding) -> None:
    """Print what the rig says of itself and where it disagrees."""
    console.print(_facts("Rig", _rig_facts(config, found)))
    console.print(_rig_channels(found))
    for text in found.disagreements:
        console.print(Text(f"disagreement: {text}", style="red"))
    if found.limits is not None:
        console.print(_limits(config, found))


def number(value: float) -> str:
    """Short; a dash where there is no limit."""
    return f"{value:.6g}" if math.isfinite(value) else "-"


def _facts(title: str, rows: Iterator[tuple[str, str]]) -> RenderableType:
    table = Table(show_header=False, box=None, padding=(0, 2, 0, 2))
    for name, text in rows:
        table.add_row(name, Text(text))
    return Group(Text(title, style="bold"), table, Text())


def _grid(title: str, *columns: str) -> Table:
    table = Table(title=title, title_justify="left", title_style="bold", box=None, padding=(0, 2))
    for index, name in enumerate(columns):
        table.add_column(name, justify="left" if index < 2 else "right")
    return table


def _run_facts(config: Config) -> Iterator[tuple[str, str]]:
    trial = config.trial
    yield "name", config.run.name
    known = "exists: the run is resumed" if config.record_path.exists() else "new"
    yield "record", f"{config.record_path} ({known})"
    yield "link", config.link.url
    yield "operator", config.command_url
    yield "telemetry", config.telemetry_url
    duration_s = trial.n_samples * trial.period_s
    yield (
        "trial",
        f"{trial.n_samples} samples every {trial.period_s:g} s: {duration_s:g} s, "
        f"at {1 / trial.period_s:g} Hz",
    )
    yield "start", f"by the {trial.start}, after {trial.dwell_s:g} s of rest"
    yield "feedforward", f"added to the rig's {trial.inject}"
    if config.run.initial_feedforward:
        yield "first one", f"from {config.folder / config.run.initial_feedforward}"


def _inputs(config: Config) -> RenderableType:
    table = _grid("Inputs", "name", "unit", "low", "high", "rate /s", "change cap", "pinned to 0")
    for one in config.inputs:
        pins = [word for word, on in (("start", one.pin_start), ("end", one.pin_end)) if on]
        table.add_row(
            one.name,
            one.unit,
            number(one.low),
            number(one.high),
            number(one.rate_limit_per_s),
            number(one.change_cap),
            " and ".join(pins) or "-",
        )
    return Group(table, Text())


def _outputs(config: Config) -> RenderableType:
    table = _grid("Outputs", "name", "unit", "low", "high", "error scale", "start tolerance")
    for one in config.outputs:
        table.add_row(
            one.name,
            one.unit,
            number(one.low),
            number(one.high),
            number(one.scale),
            number(one.start_tolerance),
        )
    return Group(table, Text())


DERIVATIVES = (("velocity", "/s"), ("acceleration", "/s2"), ("jerk", "/s3"), ("snap", "/s4"))


def peaks(reference: Array, period_s: float) -> list[Array]:
    """Largest absolute value of the first four difference quotients, each (n_outputs,)."""
    found = []
    slope = reference
    for _ in DERIVATIVES:
        slope = np.diff(slope, axis=0) / period_s
        found.append(np.abs(slope).max(axis=0) if len(slope) else np.zeros(reference.shape[1]))
    return found


def _reference(config: Config) -> RenderableType:
    reference = config.load_reference()
    table = _grid(f"Reference ({config.reference.kind})", "output", "quantity", "largest", "limit")
    table.add_column("unit")
    limits = _profile_limits(config)
    measured = peaks(reference, config.trial.period_s)
    for column, one in enumerate(config.outputs):
        values = reference[:, column]
        table.add_row(one.name, "from", number(float(values.min())), "", one.unit)
        table.add_row("", "to", number(float(values.max())), "", one.unit)
        for (quantity, per), peak, limit in zip(DERIVATIVES, measured, limits, strict=True):
            cells = number(float(peak[column])), number(limit[column])
            table.add_row("", quantity, *cells, one.unit + per)
    return Group(table, Text(f"  {_motion(reference, config.trial.period_s)}"), Text())


def _motion(reference: Array, period_s: float) -> str:
    moving = np.flatnonzero(np.any(np.diff(reference, axis=0) != 0, axis=1))
    if not moving.size:
        return "It never moves."
    return f"It moves from {moving[0] * period_s:g} s to {(moving[-1] + 1) * period_s:g} s."


def _profile_limits(config: Config) -> list[list[float]]:
    """(4, n_outputs): limit of each derivative of each output."""
    ours, count = config.reference, len(config.outputs)
    if not isinstance(ours, ProfileReference):
        return [[math.inf] * count for _ in DERIVATIVES]
    rows = (
        ours.velocity_limit_per_s,
        ours.acceleration_limit_per_s2,
        ours.jerk_limit_per_s3,
        ours.snap_limit_per_s4,
    )
    return [list(row) if isinstance(row, tuple) else [row] * count for row in rows]


def _learning_facts(config: Config) -> Iterator[tuple[str, str]]:
    yield "law", settings_in_words(config.law, skip=())
    ours = config.filter
    if ours.shape == "none":
        yield "Q-filter", "none"
    else:
        order = f" of order {ours.order}" if ours.shape == "butterworth" else ""
        yield (
            "Q-filter",
            f"{ours.shape}{order}, -3 dB at {number(ours.bandwidth_hz)} Hz, zero phase",
        )
    yield "around it", settings_in_words(config.learn, skip=())


def _guards(config: Config) -> RenderableType:
    table = _grid("Guards", "name", "judges", "settings")
    table.columns[2].justify = "left"
    stages = {name: stage for name, (stage, _) in guard_table().items()}
    for name, guard in config.guard_settings().items():
        words = settings_in_words(guard, skip=("enabled",)) if guard.enabled else "off"
        table.add_row(name, stages[name], words)
    return Group(table, Text())


def _ending_facts(config: Config) -> Iterator[tuple[str, str]]:
    yield "ladder", settings_in_words(config.ladder, skip=())
    yield "stop", settings_in_words(config.stop, skip=())
    trials = config.stop.baseline_trials + config.stop.trials + config.stop.floor_trials
    horizon = config.trial
    seconds = trials * (horizon.n_samples * horizon.period_s + horizon.dwell_s)
    yield "at most", f"{trials} trials, {_duration(seconds)} without the rig's returns"
    yield "on halt", config.run.on_halt


def _duration(seconds: float) -> str:
    if seconds < 120:
        return f"{seconds:.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 7200 else f"{seconds / 3600:.1f} h"


def settings_in_words(settings: Any, skip: tuple[str, ...]) -> str:
    """All settings of a table, those that differ from their default marked with a star."""
    words = []
    for field in fields(settings):
        if field.name in skip:
            continue
        value = getattr(settings, field.name)
        star = "*" if field.default is MISSING or value != field.default else ""
        if field.default is MISSING and field.default_factory is not MISSING:
            star = "*" if value != field.default_factory() else ""
        words.append(f"{field.name}{star} {_value(value)}")
    return ", ".join(words)


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return number(value)
    if isinstance(value, dict):
        return f"{{{', '.join(f'{key} = {_value(one)}' for key, one in value.items())}}}"
    if isinstance(value, tuple):
        return f"[{', '.join(_value(one) for one in value)}]"
    return str(value)


def _rig_facts(config: Config, found: LinkFinding) -> Iterator[tuple[str, str]]:
    rig = found.greeting
    yield "name", rig.name
    yield "protocol", f"version {rig.version}, samples as {rig.sample_type}"
    yield "period", f"{rig.period_ticks / rig.tick_hz:g} s, clock of {rig.tick_hz} Hz"
    way = "streamed" if config.trial.n_samples > rig.table_capacity else "held whole"
    yield "memory", f"{rig.table_capacity} samples of a table: this trial's are {way}"
    yield "can repeat", _kept(rig.samples_kept, config.trial.n_samples)
    yield "watchdog", f"{rig.watchdog_ms / 1000:g} s without the daemon, then its safe state"
    checksum = f", checksum 0x{rig.reference_crc:08x}" if rig.reference_owner == "rig" else ""
    yield "reference", f"owned by the {rig.reference_owner}{checksum}"
    best = found.exchange
    yield (
        "clock",
        f"round trip {best.delay_ns / 1e6:.3g} ms, so a start is known to "
        f"{best.delay_ns / 2e6:.3g} ms{'; the clock jumps (simulator)' if rig.clock_steps else ''}",
    )
    if found.bad_frames:
        kinds = ", ".join(f"{count} by {kind}" for kind, count in found.bad_frames.items())
        yield "line", f"damaged frames: {kinds}; if it goes on, look at cable and baud rate"


def _kept(samples_kept: int, n_samples: int) -> str:
    if samples_kept >= n_samples:
        return "any sample of the last trial"
    return f"the last {samples_kept} samples of a trial" if samples_kept else "nothing"


def _rig_channels(found: LinkFinding) -> RenderableType:
    table = _grid("Channels of the rig", "name", "unit", "role", "low", "high", "rate /s")
    roles = (("input", found.inputs), ("output", found.outputs), ("auxiliary", found.auxiliary))
    for role, channels in roles:
        for one in channels:
            table.add_row(one.name, one.unit, _role(role, one), *_bounds(one))
    return Group(table, Text())


def _role(role: str, channel: Channel) -> str:
    return f"{role}, {channel.meaning}" if channel.meaning else role


def _bounds(channel: Channel) -> tuple[str, str, str]:
    return number(channel.low), number(channel.high), number(channel.rate_per_s)


def _limits(config: Config, found: LinkFinding) -> RenderableType:
    table = _grid("Limits in force, the tighter of both", "name", "unit", "low", "high", "rate /s")
    assert found.limits is not None
    limits = found.limits
    rows = zip(config.inputs, limits.low, limits.high, limits.rate_per_s, strict=True)
    for one, low, high, rate in rows:
        table.add_row(
            one.name, one.unit, number(float(low)), number(float(high)), number(float(rate))
        )
    return Group(table, Text())
