"""Faults on demand: `kind@trial=12`, `kind@from=12` or `kind@p=0.02`, with `,size=X,count=N`.

Deterministic: whether a fault strikes depends on the seed, its kind and the trial alone.
"""

import math
import random
from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True)
class FaultKind:
    """One row of the table: the size it has if none is given, and which sizes make sense."""

    size: float
    low: float
    high: float
    meaning: str


DAY_S = 86_400.0
FOREVER_S = 1e9

KINDS: dict[str, FaultKind] = {
    "drop": FaultKind(1, 1, 1e6, "sample blocks are lost; size: how many"),
    "duplicate": FaultKind(1, 1, 1e6, "sample blocks come twice; size: how many"),
    "reorder": FaultKind(1, 1, 1e6, "sample blocks overtake each other; size: how many"),
    "late": FaultKind(0.05, 0, DAY_S, "one sample block is held back; size: seconds"),
    "corrupt": FaultKind(1, 1, 1e6, "sample blocks have a wrong byte; size: how many"),
    "lost_answer": FaultKind(1, 1, 1e6, "answers to orders are lost; size: how many"),
    "double_answer": FaultKind(1, 1, 1e6, "answers to orders come twice; size: how many"),
    "late_answer": FaultKind(0.3, 0, DAY_S, "one answer to an order is held back; size: seconds"),
    "corrupt_answer": FaultKind(1, 1, 1e6, "answers have a wrong byte; size: how many"),
    "missed_start": FaultKind(1, 1, 1, "the armed trial does not start"),
    "late_start": FaultKind(0.01, 0, DAY_S, "the trial starts late; size: seconds"),
    "offset": FaultKind(
        0.01, -1e6, 1e6, "the trial starts elsewhere; size: in the first output's unit"
    ),
    "stuck": FaultKind(0.5, 0, 1, "the first output freezes; size: from which share of the trial"),
    "spike": FaultKind(1, -1e6, 1e6, "one sample of the first output jumps; size: in its range"),
    "nan": FaultKind(1, 1, 1e9, "samples of the first output are no numbers; size: how many"),
    "noise_burst": FaultKind(
        0.05, 0, 1e6, "the first output is noisy for a tenth of the trial; size: of its range"
    ),
    "drift": FaultKind(0.001, -1e3, 1e3, "the first output drifts; size: of its range, a trial"),
    "gain": FaultKind(1.5, -1e3, 1e3, "the feedforward acts with another gain; size: factor"),
    "wrong_sign": FaultKind(-1, -1e3, 0, "the feedforward acts backwards; size: factor"),
    "resonance": FaultKind(0.5, 0, 1e3, "the plant has a resonance; size: of its own response"),
    "delay": FaultKind(8, 0, 1e6, "the feedforward acts later; size: samples"),
    "friction": FaultKind(3, 0.1, 1e3, "friction (or heat loss) changes; size: factor"),
    "load": FaultKind(0.3, 0, 1e3, "the actuator saturates early; size: share of its limit"),
    "noise": FaultKind(20, 0, 1e6, "all noise of the trial grows; size: factor"),
    "cut_short": FaultKind(0.6, 0, 1, "the trial ends early; size: after which share"),
    "silence": FaultKind(FOREVER_S, 0, FOREVER_S, "the rig says nothing; size: seconds"),
    "crash": FaultKind(
        0.5, 0, FOREVER_S, "the rig dies in the trial and comes back; size: seconds away"
    ),
    "emergency_stop": FaultKind(
        0.2, 0, FOREVER_S, "somebody presses the button; size: seconds until it is released"
    ),
    "drive_fault": FaultKind(0.5, 0, 1, "the drive trips; size: after which share of the trial"),
}
"""Every fault that can be ordered. To add one: a row here, and the place that asks for it."""

WHEN = ("trial", "from", "p")


class FaultSpecError(ValueError):
    """A fault's text cannot be read; says what was expected."""


@dataclass(frozen=True)
class FaultSpec:
    kind: str
    when: str
    at: float
    size: float

    @classmethod
    def parse(cls, text: str) -> "FaultSpec":
        """Raises FaultSpecError."""
        kind, _, rest = text.partition("@")
        if kind not in KINDS:
            raise FaultSpecError(f"{text}: unknown fault {kind!r}; expected {', '.join(KINDS)}")
        values = _numbers(text, rest)
        chosen = [word for word in WHEN if word in values]
        if set(values) - {*WHEN, "size"} or len(chosen) != 1:
            raise FaultSpecError(
                f"{text}: expected {kind}@ and one of trial=, from=, p=, then size="
            )
        when, at = chosen[0], values[chosen[0]]
        if when == "p" and not 0 <= at <= 1:
            raise FaultSpecError(f"{text}: p={at:g} is no probability; expected 0 to 1")
        if when != "p" and (at < 0 or at != int(at)):
            raise FaultSpecError(f"{text}: {when}={at:g} is no trial; expected 0, 1, 2, ...")
        row = KINDS[kind]
        size = values.get("size", row.size)
        if not row.low <= size <= row.high:
            raise FaultSpecError(
                f"{text}: size={size:g}; {kind} takes {row.low:g} to {row.high:g} ({row.meaning})"
            )
        return cls(kind, when, at, size)

    def strikes(self, trial: int, seed: int) -> bool:
        if self.when == "trial":
            return trial == self.at
        if self.when == "from":
            return trial >= self.at
        return random.Random(f"{seed}/{self.kind}/{trial}").random() < self.at


def _numbers(text: str, rest: str) -> dict[str, float]:
    """The KEY=NUMBER parts after the @. Raises FaultSpecError."""
    values: dict[str, float] = {}
    for part in rest.split(","):
        key, _, number = (word.strip() for word in part.partition("="))
        try:
            value = float(number)
        except ValueError:
            value = math.nan
        if not math.isfinite(value):
            raise FaultSpecError(f"{text}: {part!r} is not KEY=NUMBER")
        if key in values:
            raise FaultSpecError(f"{text}: {key} is given twice")
        values[key] = value
    return values


class FaultScript:
    """All faults of a run."""

    def __init__(self, specs: Sequence[str] = (), seed: int = 0) -> None:
        self.texts = tuple(specs)
        self._specs = [FaultSpec.parse(text) for text in specs]
        self._seed = seed

    def at(self, trial: int) -> dict[str, float]:
        """Size of each fault that strikes in a trial, by kind; the last one of a kind counts."""
        return {s.kind: s.size for s in self._specs if s.strikes(trial, self._seed)}

    def since(self, trial: int, kind: str) -> int:
        """Trials for which a `from` fault has been going on, counted from 1; else 1."""
        starts = [s.at for s in self._specs if s.kind == kind and s.when == "from"]
        return int(trial - starts[-1]) + 1 if starts else 1

    def without_struck(self, kind: str) -> "FaultScript":
        """For a rig that forgets: without the faults of that kind that were ordered for one trial.

        What killed it once in a trial would kill it again when that trial is repeated.
        """
        once = f"{kind}@trial="
        return FaultScript([text for text in self.texts if not text.startswith(once)], self._seed)

    def source(self, trial: int) -> random.Random:
        """Chance for what a fault of this trial hits."""
        return random.Random(f"{self._seed}/hit/{trial}")
