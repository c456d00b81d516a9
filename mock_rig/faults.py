"""Faults on demand: `kind@trial=12`, `kind@from=12` or `kind@p=0.02`, with `,size=X,count=N`.

Deterministic: whether a fault strikes depends on the seed, its kind and the trial alone.
"""

import random
from collections.abc import Sequence
from dataclasses import dataclass

KINDS: dict[str, tuple[float, str]] = {
    "drop": (1, "sample blocks are lost; size: how many"),
    "duplicate": (1, "sample blocks come twice; size: how many"),
    "reorder": (1, "sample blocks overtake each other; size: how many"),
    "late": (0.05, "one sample block is held back; size: seconds"),
    "corrupt": (1, "sample blocks have a wrong byte; size: how many"),
    "lost_answer": (1, "answers to orders are lost; size: how many"),
    "double_answer": (1, "answers to orders come twice; size: how many"),
    "missed_start": (1, "the armed trial does not start"),
    "late_start": (0.01, "the trial starts late; size: seconds"),
    "offset": (0.01, "the trial starts elsewhere; size: in the first output's unit"),
    "stuck": (0.5, "the first output freezes; size: from which share of the trial on"),
    "spike": (1, "one sample of the first output jumps; size: in its range"),
    "nan": (1, "samples of the first output are no numbers; size: how many"),
    "drift": (0.001, "the first output drifts; size: of its range, a trial"),
    "gain": (1.5, "the feedforward acts with another gain; size: factor"),
    "wrong_sign": (-1, "the feedforward acts backwards; size: factor"),
    "resonance": (0.5, "the plant has a resonance; size: of its own response"),
    "delay": (8, "the feedforward acts later; size: samples"),
    "friction": (3, "friction grows; size: factor"),
    "load": (0.3, "the actuator saturates early; size: share of its limit"),
    "noise": (20, "noise grows; size: factor"),
    "cut_short": (0.6, "the trial ends early; size: after which share"),
    "silence": (1e9, "the rig says nothing; size: seconds"),
    "crash": (0.5, "the rig dies in the trial and comes back; size: seconds away"),
    "emergency_stop": (0.2, "somebody presses the button; size: seconds until it is released"),
    "drive_fault": (0.5, "the drive trips; size: after which share of the trial"),
}
"""Default size and meaning of each kind of fault."""

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
        values = {}
        for part in rest.split(","):
            key, _, number = part.partition("=")
            try:
                values[key.strip()] = float(number)
            except ValueError:
                raise FaultSpecError(f"{text}: {part!r} is not KEY=NUMBER") from None
        unknown = set(values) - {*WHEN, "size"}
        chosen = [word for word in WHEN if word in values]
        if unknown or len(chosen) != 1:
            raise FaultSpecError(
                f"{text}: expected {kind}@ and one of trial=, from=, p=, then size="
            )
        return cls(kind, chosen[0], values[chosen[0]], values.get("size", KINDS[kind][0]))

    def strikes(self, trial: int, seed: int) -> bool:
        if self.when == "trial":
            return trial == self.at
        if self.when == "from":
            return trial >= self.at
        return random.Random(f"{seed}/{self.kind}/{trial}").random() < self.at


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

    def source(self, trial: int) -> random.Random:
        """Chance for what a fault of this trial hits."""
        return random.Random(f"{self._seed}/hit/{trial}")
