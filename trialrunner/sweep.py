"""Guard settings tried on recorded trials: false alarms against delay, over a grid.

Only guards are asked. Each candidate keeps its own memories along the record as it was played and
nobody obeys it, so its first alarm is what a run with it would have seen (up to the first action
of the recorded run's own guards); alarms after its first are counted as if it had been ignored.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Mapping, Sequence
from concurrent.futures import Executor
from dataclasses import dataclass, replace
from pathlib import Path
from statistics import fmean

from trialrunner.advancing import make_advancer
from trialrunner.agreement import limits_in_force
from trialrunner.config import ConfigError, load_text
from trialrunner.core.advance import LAW, Advancer
from trialrunner.core.run_state import Carry, RunState
from trialrunner.core.trial import Level, Memory
from trialrunner.record import RecordedTrial, RecordReader
from trialrunner.replay import ReplayError

MAX_SETTINGS = 10_000
ANEW = ("rollback", "resume")
"""Requests after which guards judge anew."""


@dataclass(frozen=True)
class Axis:
    """One swept key with its values as TOML texts."""

    key: str
    values: tuple[str, ...]

    @classmethod
    def parse(cls, text: str) -> Axis:
        """`KEY=LOW:HIGH:COUNT` or `KEY=A,B,C`. Raises ReplayError."""
        key, _, values = (part.strip() for part in text.partition("="))
        parts = key.split(".")
        if len(parts) < 3 or parts[0] != "guards":
            raise ReplayError(
                f"--sweep {text}: only guards can be swept (guards.NAME.SETTING=...), because "
                "another law would have played other trials; ask about one with --set"
            )
        found = _spaced(text, values) if ":" in values else _listed(values)
        if not found or "" in found:
            raise ReplayError(f"--sweep {text}: expected KEY=LOW:HIGH:COUNT or KEY=A,B,C")
        return cls(key, found)

    @property
    def guard(self) -> str:
        return self.key.split(".")[1]


def _listed(values: str) -> tuple[str, ...]:
    return tuple(dict.fromkeys(part.strip() for part in values.split(",")))


def _spaced(text: str, values: str) -> tuple[str, ...]:
    try:
        low, high, count = (part.strip() for part in values.split(":"))
        first, last, n_values = float(low), float(high), int(count)
    except ValueError:
        raise ReplayError(f"--sweep {text}: expected KEY=LOW:HIGH:COUNT, three numbers") from None
    usable = math.isfinite(first) and math.isfinite(last) and 2 <= n_values <= MAX_SETTINGS
    if not usable or first == last:
        raise ReplayError(
            f"--sweep {text}: expected two different ends and 2 to {MAX_SETTINGS} values"
        )
    # Rounded, because 2.3000000000000003 in a configuration is nobody's choice.
    numbers = [
        float(f"{first + (last - first) * i / (n_values - 1):.12g}") for i in range(n_values)
    ]
    # Settings that count something take whole numbers only.
    whole = low.lstrip("-").isdecimal() and high.lstrip("-").isdecimal()
    return tuple(str(int(x)) if whole and x == int(x) else repr(x) for x in numbers)


@dataclass(frozen=True)
class Findings:
    """What one setting said of one record."""

    false_alarms: int
    """Trials that a swept guard complained of before the fault, or at all where there is none."""
    healthy_trials: int
    delay: int | None
    """Trials from the fault to the first complaint; None: missed, or no fault here."""
    faulty: bool


@dataclass(frozen=True)
class Point:
    """One setting over all records."""

    place: tuple[int, ...]
    """Index on each axis."""
    overrides: tuple[str, ...]
    findings: tuple[Findings, ...]
    margin: int | None = None
    """Steps of the grid to the nearest setting with a false alarm; None: the grid has none."""

    @property
    def false_alarms(self) -> int:
        return sum(one.false_alarms for one in self.findings)

    @property
    def missed(self) -> int:
        return sum(one.faulty and one.delay is None for one in self.findings)

    @property
    def delays(self) -> list[int]:
        return [one.delay for one in self.findings if one.delay is not None]

    @property
    def worst_delay(self) -> int | None:
        return max(self.delays, default=None)

    @property
    def mean_delay(self) -> float | None:
        return fmean(self.delays) if self.delays else None


@dataclass(frozen=True)
class Sweep:
    axes: tuple[Axis, ...]
    points: tuple[Point, ...]
    healthy_trials: int
    faulty_records: int
    acted: tuple[tuple[str, int], ...]
    """Records whose own guards changed the run, and after which trial: from there on the trials
    are not what a candidate would have met."""

    @property
    def recommended(self) -> Point | None:
        """No false alarm, then fewest missed, least delay, widest margin; None if all raise one."""
        silent = [point for point in self.points if not point.false_alarms]
        return min(silent, key=_preference, default=None)


def _preference(point: Point) -> tuple[float, float, float, float]:
    margin = math.inf if point.margin is None else point.margin
    return point.missed, point.worst_delay or 0, point.mean_delay or 0, -margin


@dataclass(frozen=True)
class Task:
    """A share of the settings on one record: what is sent to a worker."""

    path: Path
    settings: tuple[tuple[str, ...], ...]
    guards: frozenset[str]
    fault_at: int | None


@dataclass(frozen=True)
class TaskResult:
    findings: tuple[Findings, ...] = ()
    acted_after: int | None = None
    refused: tuple[str, tuple[str, ...]] | None = None
    """Source and problems of a ConfigError, which itself cannot travel between processes."""


def sweep(
    paths: Sequence[Path],
    axes: Sequence[Axis],
    fault_at: Mapping[Path, int],
    executor: Executor,
    shares: int = 1,
) -> Sweep:
    """Every combination over every record; each record's settings are split into `shares` tasks.

    `fault_at` is the first faulty trial of a record; one that is not named has no fault. Raises
    ConfigError, ReplayError, RecordError.
    """
    places = _places(axes)
    settings = [_overrides(axes, place) for place in places]
    step = -(-len(settings) // max(shares, 1))
    groups = [tuple(settings[at : at + step]) for at in range(0, len(settings), step)]
    guards = frozenset(axis.guard for axis in axes)
    tasks = [Task(path, group, guards, fault_at.get(path)) for path in paths for group in groups]
    results = list(executor.map(run_task, tasks))
    for result in results:
        if result.refused is not None:
            raise ConfigError(*result.refused)
    rows = [results[at : at + len(groups)] for at in range(0, len(results), len(groups))]
    by_record = [[found for one in row for found in one.findings] for row in rows]
    points = [
        Point(place, overrides, findings)
        for place, overrides, findings in zip(
            places, settings, zip(*by_record, strict=True), strict=True
        )
    ]
    acted = tuple(
        (str(path), row[0].acted_after)
        for path, row in zip(paths, rows, strict=True)
        if row[0].acted_after is not None
    )
    healthy = sum(one.healthy_trials for one in points[0].findings)
    return Sweep(tuple(axes), _with_margins(points), healthy, len(fault_at), acted)


def _places(axes: Sequence[Axis]) -> list[tuple[int, ...]]:
    keys = [axis.key for axis in axes]
    if len(set(keys)) < len(keys):
        raise ReplayError("--sweep: each key may be swept once")
    if math.prod(len(axis.values) for axis in axes) > MAX_SETTINGS:
        raise ReplayError(f"--sweep: more than {MAX_SETTINGS} combinations; take fewer values")
    return list(itertools.product(*(range(len(axis.values)) for axis in axes)))


def _overrides(axes: Sequence[Axis], place: Sequence[int]) -> tuple[str, ...]:
    return tuple(f"{a.key}={a.values[i]}" for a, i in zip(axes, place, strict=True))


def _with_margins(points: Sequence[Point]) -> tuple[Point, ...]:
    loud = [point.place for point in points if point.false_alarms]

    def margin(point: Point) -> int | None:
        steps = (max(abs(a - b) for a, b in zip(point.place, p, strict=True)) for p in loud)
        return min(steps, default=None)

    return tuple(replace(point, margin=margin(point)) for point in points)


def run_task(task: Task) -> TaskResult:
    """In a worker: one pass over the record, all settings of the task side by side."""
    with RecordReader(task.path) as reader:
        try:
            candidates = [_Candidate(reader, setting, task) for setting in task.settings]
        except ConfigError as error:
            return TaskResult(refused=(error.source, error.problems))
        acted_after = None
        for recorded, state, carry, anew in played(reader):
            for candidate in candidates:
                candidate.judge(recorded, state, carry, anew=anew)
            if acted_after is None and _guards_acted(recorded):
                acted_after = recorded.summary.index
    return TaskResult(tuple(one.findings() for one in candidates), acted_after)


def _guards_acted(recorded: RecordedTrial) -> bool:
    return any(verdict.level > Level.WARN for verdict in recorded.verdicts)


def played(reader: RecordReader) -> Iterator[tuple[RecordedTrial, RunState, Carry, bool]]:
    """Each trial with the state and arrays before it; one in memory.

    The last says that an operator's request before it made the guards judge anew.
    """
    state, carry, anew = reader.first_state(), reader.carry_at(0), False
    assert carry is not None
    for entry, kind in reader.entries():
        if kind == "request":
            row = reader.request_at(entry)
            if row.changes_state:
                state, carry = reader.state_at(entry), reader.carry_at(entry) or carry
                anew = anew or row.kind in ANEW
        elif kind == "trial":
            recorded = reader.trial_at(entry)
            yield recorded, state, carry, anew
            state, carry = recorded.summary.state, reader.carry_at(entry) or carry
            anew = False


class _Candidate:
    """One setting on its way along a record."""

    def __init__(self, reader: RecordReader, overrides: Sequence[str], task: Task) -> None:
        self._advancer = make_candidate(reader, overrides)
        self._guards = task.guards
        self._fault_at = math.inf if task.fault_at is None else task.fault_at
        self._memories: Mapping[str, Memory] = {}
        self._false_alarms = self._healthy = 0
        self._detected: int | None = None

    def judge(self, recorded: RecordedTrial, state: RunState, carry: Carry, *, anew: bool) -> None:
        memories = {} if anew else self._memories
        judged = self._advancer.judge(recorded.trial, replace(state, memories=memories), carry)
        kept = judged.decision.state.memories
        self._memories = {name: memory for name, memory in kept.items() if name != LAW}
        index = recorded.summary.index
        alarm = any(
            one.guard in self._guards and (one.level > Level.PASS or one.void)
            for one in judged.verdicts
        )
        if index < self._fault_at:
            self._healthy += 1
            self._false_alarms += alarm
        elif alarm and self._detected is None:
            self._detected = index

    def findings(self) -> Findings:
        faulty = math.isfinite(self._fault_at)
        delay = None if self._detected is None else int(self._detected - self._fault_at)
        return Findings(self._false_alarms, self._healthy, delay, faulty)


def make_candidate(reader: RecordReader, overrides: Sequence[str]) -> Advancer:
    """The advancer of a record with other guard settings; its law is never asked."""
    facts = reader.facts
    config = load_text(facts.config_text, overrides, f"configuration in {reader.path}")
    limits = limits_in_force(config, facts.channels())
    return make_advancer(config.run_settings(), limits, reader.reference, facts.sample_type)
