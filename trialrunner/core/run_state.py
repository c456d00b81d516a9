"""The state of a run between two trials: everything that the next decision depends on.

`RunState` holds what is small and goes into JSON; `Carry` holds the arrays. Both are stored with
every trial, so that a resumed run and a replay continue bit for bit.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, fields, replace
from typing import Any

import numpy as np

from trialrunner.core.trial import Array, Mask, Memory, Purpose, Verdict

RECENT_NORMS = 64
"""Norms kept for guards and stop rules; bounded so that weeks of trials cost no memory."""


@dataclass(frozen=True)
class RunState:
    trial: int = 0
    """Index of the next trial."""
    purpose: Purpose = Purpose.LEARN
    """Why the next trial is run."""
    learning: bool = True
    frozen_by: str = ""
    """Name of the guard, or "operator", that froze learning."""
    clean_in_row: int = 0
    """Trials without complaint since the freeze."""
    gain: float = 1.0
    counted: int = 0
    """Trials that counted, floor trials not included."""
    updates: int = 0
    """Feedforwards that the law has made."""
    averaged: int = 0
    """Trials already in the running mean error."""
    voids_in_row: int = 0
    voids: int = 0
    roll_backs: int = 0
    """By guards, since the start or since an operator last resumed a halted run."""
    late_updates: int = 0
    baseline_left: int = 0
    confirm_left: int = 0
    confirm_norm: float = math.inf
    """Error norm that confirmation trials should come back to."""
    floor_left: int = -1
    """Floor trials still to run; -1: the floor phase has not begun."""
    floor_count: int = 0
    """Floor trials that counted."""
    floor_norm: float = math.nan
    """Repeatability floor: error norm of what does not repeat; from the second floor trial on."""
    first_norm: float = math.nan
    best_trial: int = -1
    """The trial with the smallest error norm. Frozen repeats compete too: it stands for a
    feedforward, and with several trials of the same one their smallest norm stands for it."""
    best_norm: float = math.inf
    best_level: float = math.inf
    """Median error norm of the trials around the best one: what its feedforward can be expected to
    give, where the best of many trials was also a lucky one."""
    last_good_trial: int = -1
    """The last trial about which no guard complained."""
    stall: int = 0
    """Learning trials since the error norm last improved enough."""
    stall_norm: float = math.inf
    """Error norm at that improvement."""
    recent_norms: tuple[float, ...] = ()
    """Of trials that counted, oldest first, without probe and floor trials."""
    recent_trials: tuple[int, ...] = ()
    """Their indices."""
    judged_from: int = 0
    """Guards see no error norm from before this trial: an operator rolled back or resumed there."""
    memories: Mapping[str, Memory] = field(default_factory=dict)
    """By guard name; "law" is the law's own."""
    ending: str = ""
    """Why the floor phase runs; becomes `over` with its last trial."""
    halted: str = ""
    """Why a guard or the ladder halted the run; only the request "resume" ends that."""
    over: str = ""
    """Why the run is over; empty while it goes on."""

    def to_json(self) -> dict[str, Any]:
        """JSON-ready; NaN and infinities as strings, because JSON has none."""
        return {f.name: to_plain(getattr(self, f.name)) for f in fields(self)}

    @classmethod
    def from_json(cls, values: Mapping[str, Any]) -> "RunState":
        known = {f.name for f in fields(cls)}
        read = {key: from_plain(value) for key, value in values.items() if key in known}
        read["purpose"] = Purpose(read["purpose"])
        for key in ("recent_norms", "recent_trials"):
            read[key] = tuple(read.get(key, ()))
        return cls(**read)


_ODD = {"float:nan": math.nan, "float:inf": math.inf, "float:-inf": -math.inf}
_TEXT = "text:"
"""Stands before a text that would read as one of the other two."""


def to_plain(value: Any) -> Any:
    """A value as JSON has it: NaN and infinities as texts, tuples as lists."""
    if isinstance(value, int):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else f"float:{value}"
    if isinstance(value, str) and (value in _ODD or value.startswith(_TEXT)):
        return _TEXT + value
    if isinstance(value, Mapping):
        return {key: to_plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [to_plain(item) for item in value]
    return value


def from_plain(value: Any) -> Any:
    """The inverse of `to_plain`, but for tuples."""
    if isinstance(value, int | float):
        return value
    if isinstance(value, str):
        return _ODD.get(value, value.removeprefix(_TEXT))
    if isinstance(value, dict):
        return {key: from_plain(item) for key, item in value.items()}
    if isinstance(value, list):
        return [from_plain(item) for item in value]
    return value


@dataclass(frozen=True)
class Carry:
    """The arrays between two trials."""

    feedforward: Array
    """(n_samples, n_inputs): what the next trial plays, exactly as it will be sent."""
    clipped: Mask
    """(n_samples, n_inputs): where limits cut the law's wish for it."""
    learned: Array
    """(n_samples, n_inputs): the learned feedforward; differs from `feedforward` only in PROBE
    trials."""
    mean_error: Array
    """(n_samples, n_outputs): running mean error over trials with the same feedforward."""
    law: Mapping[str, Array] = field(default_factory=dict)
    floor: Mapping[str, Array] = field(default_factory=dict)
    """Streaming mean and spread of the error over the floor trials (see norms); empty before."""

    @classmethod
    def zeros(cls, n_samples: int, n_inputs: int, n_outputs: int) -> "Carry":
        flat = np.zeros((n_samples, n_inputs))
        return cls(flat, np.zeros(flat.shape, dtype=bool), flat, np.zeros((n_samples, n_outputs)))


@dataclass(frozen=True)
class Outcome:
    """What one trial led to: stored in one transaction with the trial."""

    verdicts: tuple[Verdict, ...]
    void: bool
    norm: float
    """Scaled error norm; NaN where the trial is incomplete."""
    action: str
    """learn, repeat, recall, halt or finish."""
    sentence: str
    """What was done and why, for people."""
    state: RunState
    carry: Carry
    late: bool = False
    """The update missed its deadline and the last feedforward is repeated."""


@dataclass(frozen=True)
class Request:
    """An operator's request that changes the run state; takes effect between trials."""

    kind: str
    """freeze, learn, rollback, or resume after a guard halted the run."""
    target: str = ""
    """rollback only: best, last_good or a trial index."""


Recall = Callable[[int], Array]
"""The learned feedforward with which a trial was run, by trial index."""

__all__ = ["RECENT_NORMS", "Carry", "Outcome", "Recall", "Request", "RunState", "replace"]
