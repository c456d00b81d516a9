"""Rehearsing a configuration: mock rig and daemon as two real processes, watched by telemetry."""

from __future__ import annotations

import json
import math
import os
import signal
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from pathlib import Path
from statistics import median_high
from typing import Any

import zmq

from trialrunner.config import Config, load
from trialrunner.core.trial import Level, Purpose
from trialrunner.record import RecordReader

FLOORS = 2.0
"""A rehearsal succeeds if the last error norm is at most so many repeatability floors."""

START_S = 30.0
"""Longest wait for the mock rig to listen."""

LEAVE_S = 15.0
"""Longest wait for a process to leave after SIGTERM, before it is killed."""


class RehearsalError(Exception):
    """A rehearsal could not be set up; the text says why and what to do."""


@dataclass(frozen=True)
class Rehearsal:
    """What to rehearse; None leaves a choice to the configuration."""

    config: str | None = None
    link: str | None = None
    trials: int | None = None
    seed: int | None = None
    record: str | None = None
    faults: tuple[str, ...] = ()
    overrides: tuple[str, ...] = ()
    real_time: bool = False


@dataclass(frozen=True)
class Progress:
    """One message of the daemon's telemetry."""

    topic: str
    values: dict[str, Any]


@dataclass(frozen=True)
class Summary:
    """How a rehearsal went; norms as the configuration scales them."""

    plant: str
    link: str
    record: str
    trials: int
    voids: int
    late_updates: int
    roll_backs: int
    verdicts: dict[str, int]
    """How often each guard said what, by "guard: level"."""
    first_norm: float | None
    best_norm: float | None
    last_norm: float | None
    """Median error norm over the repeats of the last feedforward."""
    reduction: float | None
    floor: float | None
    """Repeatability floor: what differs between those repeats."""
    reached: bool
    """The last error norm is within FLOORS times the floor."""
    over: str
    daemon_exit: int

    def to_json(self) -> dict[str, Any]:
        return asdict(self)


def built_in_config() -> Path:
    """The configuration to rehearse when none is named: the bead axis."""
    for folder in (Path.cwd(), Path(__file__).resolve().parent.parent):
        path = folder / "config" / "bead_axis.toml"
        if path.exists():
            return path
    raise RehearsalError(
        "there is no config/bead_axis.toml here; run this in a clone of trialrunner, or name a "
        "configuration"
    )


def rehearse(wanted: Rehearsal) -> Iterator[Progress | Summary]:
    """Progress as it happens, the summary last. Raises ConfigError, RehearsalError."""
    path = Path(wanted.config) if wanted.config else built_in_config()
    config = load(path, wanted.overrides)
    if config.rehearsal is None:
        raise RehearsalError(
            f"{path}: has no table [rehearsal] that names a plant to rehearse with"
        )
    with tempfile.TemporaryDirectory(prefix="rehearsal-") as folder:
        processes = Processes(config, path, wanted, Path(folder))
        try:
            processes.start()
            yield from processes.watch()
        finally:
            processes.stop()
        yield processes.summary()


class Processes:
    """The two processes of one rehearsal, in a directory of their own."""

    def __init__(self, config: Config, path: Path, wanted: Rehearsal, folder: Path) -> None:
        assert config.rehearsal is not None
        self._config = config
        self._path = path
        self._wanted = wanted
        self._table = config.rehearsal
        self._folder = folder
        self._link = wanted.link or self._table.link
        self._record = Path(wanted.record or _fresh_record(config.run.name))
        self._telemetry_url = f"ipc://{folder}/telemetry"
        self._rig: subprocess.Popen[str] | None = None
        self._daemon: subprocess.Popen[bytes] | None = None
        if self._record.exists():
            raise RehearsalError(f"{self._record} exists already; name another with --record")

    def start(self) -> None:
        if self._link == "serial":
            rig_url = f"pty://{self._folder}/rig"
            daemon_url = f"serial://{self._folder}/rig?baud=1000000"
        else:
            rig_url = daemon_url = f"zmq+ipc://{self._folder}/rig"
        self._rig = subprocess.Popen(
            self._rig_command(rig_url), stdout=subprocess.PIPE, text=True, start_new_session=True
        )
        self._await_rig()
        self._daemon = subprocess.Popen(
            self._daemon_command(daemon_url),
            stderr=(self._folder / "daemon.log").open("wb"),
            stdout=subprocess.DEVNULL,
            start_new_session=True,
        )

    def _await_rig(self) -> None:
        rig = self._rig
        assert rig is not None
        assert rig.stdout is not None
        line = rig.stdout.readline()
        if not line:
            raise RehearsalError(
                f"the mock rig left with exit code {rig.wait()} before it listened; see above"
            )
        json.loads(line)

    def _rig_command(self, url: str) -> list[str]:
        table, wanted = self._table, self._wanted
        seed = table.seed if wanted.seed is None else wanted.seed
        command = [sys.executable, "-m", "mock_rig", "--plant", table.plant, "--link", url]
        command += ["--seed", str(seed)]
        for spec in (*table.faults, *wanted.faults):
            command += ["--fault", spec]
        for name, value in table.options.items():
            option = "--" + name.replace("_", "-")
            if value is not False:
                command += [option] if value is True else [option, str(value)]
        return [*command, "--real-time"] if wanted.real_time else command

    def _daemon_command(self, url: str) -> list[str]:
        wanted = self._wanted
        overrides = [*wanted.overrides, f"link.url={json.dumps(url)}"]
        overrides += [f"run.record={json.dumps(str(self._record.resolve()))}"]
        overrides += [f"operator.telemetry_url={json.dumps(self._telemetry_url)}"]
        overrides += [f"operator.command_url={json.dumps(f'ipc://{self._folder}/command')}"]
        if wanted.trials is not None:
            overrides.append(f"stop.trials={wanted.trials}")
        command = [sys.executable, "-m", "trialrunner", "run", str(self._path), "--exit-on-halt"]
        for override in overrides:
            command += ["--set", override]
        return command

    def watch(self) -> Iterator[Progress]:
        """Telemetry until the daemon leaves."""
        daemon = self._daemon
        assert daemon is not None
        with zmq.Context() as context, context.socket(zmq.SUB) as socket:
            socket.setsockopt(zmq.LINGER, 0)
            for topic in ("status", "trial", "event", "verdict"):
                socket.setsockopt(zmq.SUBSCRIBE, topic.encode() + b"\0")
            socket.connect(self._telemetry_url)
            while True:
                alive = daemon.poll() is None
                while socket.poll(100 if alive else 0):
                    name, _, body = socket.recv().partition(b"\0")
                    yield Progress(name.decode(), json.loads(body)["data"])
                if not alive:
                    return

    def stop(self) -> None:
        """End whatever still runs; the daemon first, so that it can say goodbye to the rig."""
        for process in (self._daemon, self._rig):
            if process is None or process.poll() is not None:
                continue
            os.killpg(process.pid, signal.SIGTERM)
            try:
                process.wait(LEAVE_S)
            except subprocess.TimeoutExpired:
                os.killpg(process.pid, signal.SIGKILL)
                process.wait()
        if self._rig is not None and self._rig.stdout is not None:
            self._rig.stdout.close()

    def summary(self) -> Summary:
        code = 0 if self._daemon is None else self._daemon.returncode
        if not self._record.exists():
            log = (self._folder / "daemon.log").read_text(errors="replace")
            raise RehearsalError(f"the daemon left with exit code {code} and no record:\n{log}")
        with RecordReader(self._record) as reader:
            return summarise(reader, self._table.plant, self._link, code)


def summarise(reader: RecordReader, plant: str, link: str, daemon_exit: int) -> Summary:
    """The result of a run from its record."""
    state, floor_norms = reader.last_state(), []
    verdicts: dict[str, int] = {}
    for summary in reader.summaries():
        if summary.purpose is Purpose.FLOOR and not summary.void:
            floor_norms.append(summary.norm)
        for verdict in reader.verdicts(summary.index):
            if verdict.level > Level.PASS or verdict.void:
                key = f"{verdict.guard}: {'void' if verdict.void else verdict.level.word}"
                verdicts[key] = verdicts.get(key, 0) + 1
    last = median_high(floor_norms) if floor_norms else None
    floor = _finite(state.floor_norm)
    first, best = _finite(state.first_norm), _finite(state.best_norm)
    return Summary(
        plant=plant,
        link=link,
        record=str(reader.path),
        trials=reader.n_trials,
        voids=state.voids,
        late_updates=state.late_updates,
        roll_backs=state.roll_backs,
        verdicts=verdicts,
        first_norm=first,
        best_norm=best,
        last_norm=last,
        reduction=first / last if first and last else None,
        floor=floor,
        reached=last is not None and floor is not None and last <= FLOORS * floor,
        over=state.over,
        daemon_exit=daemon_exit,
    )


def _fresh_record(name: str) -> str:
    stamp = datetime.now(UTC).strftime("%Y%m%dT%H%M%S")
    return f"{name}-rehearsal-{stamp}-{os.getpid()}.trialrecord"


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None
